"""The units that nearly every site writes, reduced to SI beforehand.

Reading all units that there are takes pint a third of a second at the start of each command; a site
with these alone is spared it. Each number is the one that pint gives to the last bit; a test
compares.
"""

from __future__ import annotations

__all__ = ["FACTORS"]

FACTORS = {
    "bar": ("Pa", 1e5, 0.0),
    "mbar": ("Pa", 100.0, 0.0),
    "kPa": ("Pa", 1e3, 0.0),
    "MPa": ("Pa", 1e6, 0.0),
    "psi": ("Pa", 6894.7572931683635, 0.0),
    "mmHg": ("Pa", 133.322387415, 0.0),
    "inHg": ("Pa", 3386.3886403409997, 0.0),
    "degC": ("K", 1.0, 273.15),
    "degF": ("K", 0.5555555555555429, 255.37222222222223),
    "K": ("K", 1.0, 0.0),
    "t/h": ("kg/s", 0.2777777777777778, 0.0),
    "kg/h": ("kg/s", 0.0002777777777777778, 0.0),
    "kg/s": ("kg/s", 1.0, 0.0),
    "klb/h": ("kg/s", 0.12599788055555558, 0.0),
    "lb/h": ("kg/s", 0.0001259978805555556, 0.0),
    "m^3/h": ("m^3/s", 0.0002777777777777778, 0.0),
    "m3/h": ("m^3/s", 0.0002777777777777778, 0.0),
    "Nm3/h": ("Nm3/s", 0.0002777777777777778, 0.0),
    "kg/m^3": ("kg/m^3", 1.0, 0.0),
    "kg/m3": ("kg/m^3", 1.0, 0.0),
    "kg/Nm3": ("kg/Nm3", 1.0, 0.0),
    "W": ("W", 1.0, 0.0),
    "kW": ("W", 1e3, 0.0),
    "MW": ("W", 1e6, 0.0),
    "%": ("1", 0.01, 0.0),
    "1": ("1", 1.0, 0.0),
    "m": ("m", 1.0, 0.0),
    "mm": ("m", 0.001, 0.0),
    "m^3": ("m^3", 1.0, 0.0),
    "m3": ("m^3", 1.0, 0.0),
    "kg": ("kg", 1.0, 0.0),
    "t": ("kg", 1e3, 0.0),
    "kJ/kg": ("J/kg", 1e3, 0.0),
    "MJ/kg": ("J/kg", 1e6, 0.0),
    "kW/K": ("W/K", 1e3, 0.0),
    "s": ("s", 1.0, 0.0),
    "min": ("s", 60.0, 0.0),
    "h": ("s", 3600.0, 0.0),
    "d": ("s", 86400.0, 0.0),
}
"""Unit without its datum: the SI unit (a `Quantity`'s value), scale and offset of `Unit`."""
