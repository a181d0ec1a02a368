"""What ports say about fuel and product is what the kind counts as fuel and product."""

from __future__ import annotations

import pytest
from equipment_builders import dead, drawn, fuel, heat, power, water

from monitor.equipment import KINDS

STEAM = water("st", 10.0, p_bar=12.0, T_C=240.0)
LOW = water("lo", 10.0, p_bar=4.0, T_C=180.0)
COLD = water("co", 9.0, p_bar=12.0, T_C=60.0)
WARM = water("wa", 9.0, p_bar=11.0, T_C=95.0)
EXAMPLES = {
    "boiler": {
        "fuel": fuel("f", 0.7, heating_value=48e6, ratio=1.04),
        "feedwater": COLD,
        "steam": STEAM,
        "blowdown": LOW,
        "loss": heat("l", 3e6, 130.0),
    },
    "closed_feedwater_heater": {
        "steam": STEAM,
        "feedwater_in": COLD,
        "drain": LOW,
        "feedwater_out": WARM,
    },
    "condenser": {
        "steam": STEAM,
        "cooling_in": COLD,
        "condensate": LOW,
        "cooling_out": WARM,
    },
    "control_volume": {"inlet": STEAM, "outlet": LOW},
    "exchanger": {"hot_in": STEAM, "cold_in": COLD, "hot_out": LOW, "cold_out": WARM},
    "flash_vessel": {"inlet": COLD, "steam": LOW, "condensate": WARM},
    "header": {"inlet": [STEAM, LOW], "outlet": WARM},
    "letdown": {"inlet": STEAM, "spray": COLD, "outlet": LOW},
    "pump": {"inlet": COLD, "power": power("w", 1e5), "outlet": WARM},
    "trap_group": {"inlet": COLD, "outlet": WARM},
    "turbine": {"inlet": STEAM, "extraction": COLD, "exhaust": LOW, "power": power("w", 9e5)},
    "user": {"steam": STEAM, "condensate": COLD, "lost": LOW, "heat": heat("q", 9e6, 110.0)},
    "vent": {"inlet": STEAM, "outlet": LOW},
}
# What condenses in these, or is held in it, moves between fuel and product inside the equipment.
MIXING = {"accumulator", "deaerator", "open_feedwater_heater"}


def test_every_kind_has_an_example_here():
    assert EXAMPLES.keys() | MIXING == KINDS.keys()


@pytest.mark.parametrize("kind", EXAMPLES)
def test_ports_and_kind_agree_on_fuel_and_product(kind):
    box, at = drawn(kind, EXAMPLES[kind]), dead(12.0)
    sums = {("in", "fuel"): 0.0, ("out", "fuel"): 0.0, ("in", "product"): 0.0}
    sums |= {("out", "product"): 0.0, ("out", "loss"): 0.0}
    for port in KINDS[kind].ports:
        for state in box.at(port.name):
            sums[port.direction, port.side] += float(state.exergy(at)[0])
    spent, made = box.item.kind.fuel(box, at)
    assert spent[0] == pytest.approx(sums["in", "fuel"] - sums["out", "fuel"], rel=1e-12)
    assert made[0] == pytest.approx(sums["out", "product"] - sums["in", "product"], abs=1e-6)
