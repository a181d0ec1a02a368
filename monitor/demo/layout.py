"""How the demo plant is piped: which streams enter and leave each piece of equipment.

The site file says the same in its own words; a test holds the two together.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["MACHINES", "Layout"]


@dataclass(frozen=True)
class Layout:
    """One piece of equipment and its streams."""

    id: str
    kind: str
    inlets: tuple[str, ...]
    outlets: tuple[str, ...]


MACHINES = (
    Layout("B1", "boiler", ("gas", "b1_feed"), ("b1_steam", "b1_blowdown", "b1_stack")),
    Layout("B2", "boiler", ("bark", "b2_feed"), ("b2_steam", "b2_blowdown", "b2_stack")),
    Layout("HDR62", "header", ("b1_steam", "b2_steam"), ("tg1_inlet", "tg2_inlet", "ld62_inlet")),
    Layout("TG1", "turbine", ("tg1_inlet",), ("tg1_extraction", "tg1_exhaust", "tg1_power")),
    Layout("LD62", "letdown", ("ld62_inlet", "ld62_spray"), ("ld62_outlet",)),
    Layout(
        "HDR12",
        "header",
        ("tg1_extraction", "ld62_outlet"),
        ("disp_steam", "ld12_inlet", "acc_charge"),
    ),
    Layout("ACC", "accumulator", ("acc_charge", "acc_fill"), ("acc_discharge",)),
    Layout("LD12", "letdown", ("ld12_inlet", "ld12_spray"), ("ld12_outlet",)),
    Layout(
        "HDR4",
        "header",
        ("tg1_exhaust", "ld12_outlet", "acc_discharge"),
        ("bm_steam", "heat_steam", "da_steam"),
    ),
    Layout("DISP", "user", ("disp_steam",), ("disp_return", "disp_lost", "disp_heat")),
    Layout("BM", "user", ("bm_steam",), ("bm_return", "bm_lost", "bm_heat")),
    Layout("HEAT", "user", ("heat_steam",), ("heat_return", "heat_heat")),
    Layout("TG2", "turbine", ("tg2_inlet",), ("tg2_exhaust", "tg2_power")),
    Layout("COND", "condenser", ("tg2_exhaust", "cooling_in"), ("hotwell", "cooling_out")),
    Layout("CEP", "pump", ("hotwell", "cep_power"), ("condensate",)),
    Layout(
        "DA",
        "deaerator",
        ("da_steam", "bm_return", "disp_return", "heat_return", "condensate", "makeup"),
        ("feedwater",),
    ),
    Layout("FWP", "pump", ("feedwater", "fwp_power"), ("feed_main",)),
    Layout(
        "FWM",
        "control_volume",
        ("feed_main",),
        ("b1_feed", "b2_feed", "ld62_spray", "ld12_spray", "acc_fill"),
    ),
)
