"""Chemical exergy of fuels as a ratio to the lower heating value.

The typical ratios are those of Kotas and of Szargut and Styrylska. Those marked ``from_memory``
were recalled, not read in the book: where a figure matters, state ``exergy_ratio`` in the site file
or use a correlation with the fuel's own analysis.

Sources:
    T. J. Kotas, The Exergy Method of Thermal Plant Analysis, 1985 (typical values).
    J. Szargut, T. Styrylska, Brennstoff-Waerme-Kraft 16, 589-596, 1964 (correlations).
    J. Szargut, Exergy Method: Technical and Ecological Applications, 2005.
    J. Szargut, Egzergia, 2007 (standard chemical exergy of pure substances).
"""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import FloatArray

__all__ = [
    "FUELS",
    "FuelError",
    "FuelRatio",
    "exergy_ratio",
    "fuel_ratio",
    "liquid_fuel_ratio",
    "moist_fuel_exergy",
    "solid_fuel_ratio",
    "wood_fuel_ratio",
]

_KOTAS = "Kotas (1985), table of typical values"
_SZARGUT_2007 = "Szargut (2007), table of standard chemical exergy"
_DRY_SOLID_LIMIT = 0.667  # the oxygen/carbon ratio where the two solid correlations meet
_WOOD_LIMIT = 2.67
_EVAPORATION_HEAT = 2.442e6  # [J/kg] of water at 25 degC
_SULPHUR_EXERGY = 9.417e6  # [J/kg] chemical exergy of sulphur above its heating value


class FuelError(ValueError):
    """A fuel without a known ratio of exergy to lower heating value."""


@dataclass(frozen=True)
class FuelRatio:
    """Chemical exergy / lower heating value of a typical fuel, at 25 degC and 1 atm.

    Attributes:
        value: the ratio; the middle of the range where only a range is published.
        low: the lower end of the published range.
        high: the upper end of it; equal to ``low`` where one figure is published.
        source: where it is published.
        from_memory: whether the figure was recalled and not confirmed against the source.
    """

    value: float
    low: float
    high: float
    source: str
    from_memory: bool


def _range(low: float, high: float) -> FuelRatio:
    return FuelRatio(round(0.5 * (low + high), 4), low, high, _KOTAS, from_memory=True)


def _one(value: float, source: str = _KOTAS, *, from_memory: bool = True) -> FuelRatio:
    return FuelRatio(value, value, value, source, from_memory)


FUELS: dict[str, FuelRatio] = {
    # Confirmed in several public texts as the practical value; Kotas prints 1.04 +- 0.5 %.
    "natural_gas": FuelRatio(1.04, 1.035, 1.045, "Szargut (2005)", from_memory=False),
    "hard_coal": _range(1.06, 1.10),
    "coke": _one(1.05),
    "peat": _one(1.16),
    "wood": _range(1.15, 1.30),  # depends on moisture: `wood_fuel_ratio` with `moist_fuel_exergy`
    "fuel_oil": _range(1.04, 1.08),
    "coal_gas": _range(0.99, 1.01),
    "blast_furnace_gas": _range(0.97, 0.99),
    "methane": _one(1.0360, _SZARGUT_2007, from_memory=False),
    "ethane": _one(1.0471, _SZARGUT_2007, from_memory=False),
    "propane": _one(1.0525, _SZARGUT_2007, from_memory=False),
    "butane": _one(1.0548, _SZARGUT_2007, from_memory=False),
    "carbon": _one(1.0416, _SZARGUT_2007, from_memory=False),
    "hydrogen": _one(0.9763, "Szargut (2005; 2007), standard chemical exergy"),
    "carbon_monoxide": _one(0.9708, "Szargut (2005; 2007), standard chemical exergy"),
}
"""Typical fuels by name."""

_WITHOUT_RATIO = {"black_liquor": "no published ratio could be confirmed for black liquor"}


def fuel_ratio(name: str) -> FuelRatio:
    """Look up a typical fuel: ``natural_gas``, ``hard_coal``, ``wood``, ``fuel_oil`` and so on.

    Raises:
        FuelError: the fuel is not listed; the message names those that are, and what to state
            instead.
    """
    key = name.strip().lower().replace(" ", "_").replace("-", "_")
    if key in FUELS:
        return FUELS[key]
    reason = _WITHOUT_RATIO.get(key, f"'{name}' is not a listed fuel")
    near = difflib.get_close_matches(key, FUELS, n=1) if key not in _WITHOUT_RATIO else []
    hint = f" (did you mean '{near[0]}'?)" if near else ""
    raise FuelError(
        f"{reason}{hint}; state exergy_ratio (chemical exergy / lower heating value) for this "
        f"stream, or use one of {', '.join(FUELS)}"
    )


def exergy_ratio(name: str) -> float:
    """Chemical exergy / lower heating value of a typical fuel, see `fuel_ratio`.

    Raises:
        FuelError: the fuel is not listed.
    """
    return fuel_ratio(name).value


def solid_fuel_ratio(
    hydrogen: npt.ArrayLike, oxygen: npt.ArrayLike, nitrogen: npt.ArrayLike
) -> FloatArray:
    """Ratio for dry solid fuels such as coal, stated accuracy 1 %.

    1.0437 + 0.1882 h/c + 0.0610 o/c + 0.0404 n/c, Szargut and Styrylska (1964).

    Args:
        hydrogen: mass ratio h/c of the dry organic matter.
        oxygen: mass ratio o/c, 0.667 at most; NaN beyond (use `wood_fuel_ratio`).
        nitrogen: mass ratio n/c.
    """
    h, o, n = (np.asarray(v, dtype=np.float64) for v in (hydrogen, oxygen, nitrogen))
    o = np.where((o >= 0.0) & (o <= _DRY_SOLID_LIMIT), o, np.nan)
    return np.asarray(1.0437 + 0.1882 * h + 0.0610 * o + 0.0404 * n)


def wood_fuel_ratio(
    hydrogen: npt.ArrayLike, oxygen: npt.ArrayLike, nitrogen: npt.ArrayLike
) -> FloatArray:
    """Ratio for dry wood and other solid fuels rich in oxygen, stated accuracy 1 %.

    (1.0438 + 0.1882 h/c - 0.2509 (1 + 0.7256 h/c) o/c + 0.0383 n/c) / (1 - 0.3035 o/c),
    Szargut and Styrylska (1964).

    Args:
        hydrogen: mass ratio h/c of the dry organic matter.
        oxygen: mass ratio o/c, above 0.667 to 2.67; NaN outside.
        nitrogen: mass ratio n/c.
    """
    h, o, n = (np.asarray(v, dtype=np.float64) for v in (hydrogen, oxygen, nitrogen))
    o = np.where((o > _DRY_SOLID_LIMIT) & (o <= _WOOD_LIMIT), o, np.nan)
    numerator = 1.0438 + 0.1882 * h - 0.2509 * (1.0 + 0.7256 * h) * o + 0.0383 * n
    return np.asarray(numerator / (1.0 - 0.3035 * o))


def liquid_fuel_ratio(
    hydrogen: npt.ArrayLike, oxygen: npt.ArrayLike, sulphur: npt.ArrayLike
) -> FloatArray:
    """Ratio for liquid fuels, stated accuracy 0.4 %.

    1.0401 + 0.1728 h/c + 0.0432 o/c + 0.2169 s/c (1 - 2.0628 h/c), Szargut and Styrylska (1964).

    Args:
        hydrogen: mass ratio h/c.
        oxygen: mass ratio o/c.
        sulphur: mass ratio s/c.
    """
    h, o, s = (np.asarray(v, dtype=np.float64) for v in (hydrogen, oxygen, sulphur))
    return np.asarray(1.0401 + 0.1728 * h + 0.0432 * o + 0.2169 * s * (1.0 - 2.0628 * h))


def moist_fuel_exergy(
    lower_heating_value: npt.ArrayLike,
    dry_ratio: npt.ArrayLike,
    moisture: npt.ArrayLike,
    sulphur: npt.ArrayLike = 0.0,
) -> FloatArray:
    """Chemical exergy of a moist solid fuel as received [J/kg].

    ratio_dry (LHV + 2442 kJ/kg w) + 9417 kJ/kg s, the rule of Kotas (1985); from memory.

    Args:
        lower_heating_value: of the moist fuel [J/kg].
        dry_ratio: the ratio of the dry fuel, from `solid_fuel_ratio` or `wood_fuel_ratio`.
        moisture: w, mass of water / mass of fuel as received.
        sulphur: s, mass of sulphur / mass of fuel as received.
    """
    lhv, ratio, w, s = (
        np.asarray(v, dtype=np.float64) for v in (lower_heating_value, dry_ratio, moisture, sulphur)
    )
    return np.asarray(ratio * (lhv + _EVAPORATION_HEAT * w) + _SULPHUR_EXERGY * s)
