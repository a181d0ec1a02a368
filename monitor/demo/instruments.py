"""What the demo's instruments show: the true value in the tag's unit, with their own error.

An instrument's error has three parts, together about its stated standard uncertainty: an offset
that stays, a part that wanders over hours, and noise from reading to reading.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.demo.signals import wander
from monitor.site.units import PressureDatum, Quantity

if TYPE_CHECKING:
    from monitor.demo.files import DemoTag
    from monitor.demo.plan import DemoPlan, FloatArray
    from monitor.demo.plant import Plant

__all__ = ["GAUGES", "shown", "true_value"]

# Tag -> (stream, quantity of it), or (signal, "").
GAUGES = {
    "TT-0001": ("ambient", ""),
    "PT-0001": ("barometer", ""),
    "FT-1001": ("b1_steam", "mass_flow"),
    "PT-1001": ("b1_steam", "pressure"),
    "TT-1001": ("b1_steam", "temperature"),
    "FT-1002": ("b1_feed", "mass_flow"),
    "FT-1003": ("gas", "mass_flow"),
    "FT-1004": ("b1_blowdown", "mass_flow"),
    "PT-1002": ("b1_blowdown", "pressure"),
    "FT-2001": ("b2_steam", "mass_flow"),
    "PT-2001": ("b2_steam", "pressure"),
    "TT-2001": ("b2_steam", "temperature"),
    "FT-2002": ("b2_feed", "mass_flow"),
    "FT-2003": ("bark", "mass_flow"),
    "FT-2004": ("b2_blowdown", "mass_flow"),
    "PT-2002": ("b2_blowdown", "pressure"),
    "PT-6201": ("tg1_inlet", "pressure"),
    "TT-6201": ("tg1_inlet", "temperature"),
    "PT-1201": ("disp_steam", "pressure"),
    "TT-1201": ("disp_steam", "temperature"),
    "PT-0401": ("bm_steam", "pressure"),
    "TT-0401": ("bm_steam", "temperature"),
    "FT-4101": ("tg1_inlet", "mass_flow"),
    "FT-4102": ("tg1_extraction", "mass_flow"),
    "PT-4102": ("tg1_extraction", "pressure"),
    "TT-4102": ("tg1_extraction", "temperature"),
    "PT-4103": ("tg1_exhaust", "pressure"),
    "TT-4103": ("tg1_exhaust", "temperature"),
    "JT-4101": ("tg1_power", "energy"),
    "FT-4201": ("tg2_inlet", "mass_flow"),
    "PT-4202": ("tg2_exhaust", "pressure"),
    "JT-4201": ("tg2_power", "energy"),
    "FT-4301": ("cooling_in", "mass_flow"),
    "TT-4301": ("cooling_in", "temperature"),
    "TT-4302": ("cooling_out", "temperature"),
    "TT-4303": ("hotwell", "temperature"),
    "FT-4303": ("hotwell", "mass_flow"),
    "PT-4304": ("condensate", "pressure"),
    "JT-4304": ("cep_power", "energy"),
    "FT-3001": ("makeup", "mass_flow"),
    "TT-3001": ("makeup", "temperature"),
    "FT-3002": ("da_steam", "mass_flow"),
    "PT-3003": ("feedwater", "pressure"),
    "PT-3004": ("feed_main", "pressure"),
    "TT-3004": ("feed_main", "temperature"),
    "JT-3004": ("fwp_power", "energy"),
    "ZT-5101": ("ld62_position", ""),
    "FT-5101": ("ld62_inlet", "mass_flow"),
    "TT-5101": ("ld62_outlet_gauge", ""),
    "ZT-5201": ("ld12_position", ""),
    "FT-5201": ("ld12_outlet", "mass_flow"),
    "TT-5201": ("ld12_outlet", "temperature"),
    "LT-6001": ("acc_level", ""),
    "PT-6001": ("acc_pressure", ""),
    "FT-6001": ("acc_charge", "mass_flow"),
    "FT-6002": ("acc_discharge", "mass_flow"),
    "FT-6003": ("acc_fill", "mass_flow"),
    "FT-7001": ("disp_steam", "mass_flow"),
    "FT-7002": ("disp_return", "mass_flow"),
    "TT-7002": ("disp_return", "temperature"),
    "FT-7101": ("bm_steam", "mass_flow"),
    "FT-7102": ("bm_return", "mass_flow"),
    "TT-7102": ("bm_return", "temperature"),
    "TT-7201": ("heat_return", "temperature"),
}

OFFSET, SLOW, NOISE = 0.45, 0.30, 0.50
SLOW_SECONDS = 2.5 * 3600


def true_value(plant: Plant, tag: DemoTag) -> FloatArray:
    """What a perfect instrument would show, in the tag's unit."""
    place, quantity = GAUGES[tag.name]
    si = getattr(plant.streams[place], quantity) if quantity else plant.signals[place]
    if tag.unit.datum is PressureDatum.GAUGE:
        si = si - plant.signals["barometer"]
    return np.asarray((si - tag.unit.offset) / tag.unit.scale)


def shown(plant: Plant, plan: DemoPlan, tag: DemoTag) -> FloatArray:
    """What the instrument shows, rounded as it transmits; flows and positions end at zero."""
    value = true_value(plant, tag)
    if plan.noise:
        value = value + _error(plan, tag, value)
    if tag.unit.quantity in {Quantity.MASS_FLOW, Quantity.FRACTION}:
        value = np.maximum(value, 0.0)
    # Adding zero turns -0.0 into 0.0.
    return np.round(value, tag.decimals) + 0.0


def _error(plan: DemoPlan, tag: DemoTag, value: FloatArray) -> FloatArray:
    rng = plan.rng(f"instrument {tag.name}")
    offset = OFFSET * rng.standard_normal()
    slow = wander(
        rng,
        value.size,
        spread=SLOW,
        time_constant=SLOW_SECONDS,
        interval=float(plan.interval_s),
    )
    error = tag.uncertainty * (offset + slow + NOISE * rng.standard_normal(value.size))
    if tag.unit.quantity is Quantity.FRACTION and tag.unit.text == "%":
        # A positioner reads its end stop truly.
        return np.where(value <= 0.0, 0.0, error)
    return np.asarray(error)
