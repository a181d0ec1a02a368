"""The cost of steam that a vent lets go is charged whole, destroyed and lost together."""

from __future__ import annotations

import pytest
from physics_site import build, last, run

from monitor.economics import Prices, cost_of_losses, fuel_unit_costs, unit_costs

STEAM = {"pressure": "10 bar(a)", "temperature": "200 degC"}


def test_a_vents_cost_does_not_drop_out(tmp_path):
    site = build(
        tmp_path,
        {
            "made": STEAM | {"flow": "5 kg/s"},
            "used": STEAM | {"flow": "balance", "counts_as": "used"},
            "vented": STEAM | {"flow": "1 kg/s"},
            "gone": {"pressure": "1 bar(a)", "enthalpy": "balance", "flow": "balance"},
        },
        {
            "HDR": {"kind": "header", "ports": {"inlet": "made", "outlet": ["used", "vented"]}},
            "VENT": {"kind": "vent", "ports": {"inlet": "vented", "outlet": "gone"}},
        },
    )
    batch = run(site, {"TA": 15.0, "PA": 1.0})
    rates = batch.streams.groupby("subject")["exergy_live_kw"].mean().to_dict()
    prices = Prices({"made": 100.0}, 50.0)
    costs = unit_costs(site, rates, prices)
    fuel = fuel_unit_costs(site, rates, costs, prices)["VENT"]
    destroyed = fuel * last(batch.equipment, "VENT", "destroyed_live_kw") / 1e3
    lost = cost_of_losses(site, rates, costs, prices)["gone"]
    assert destroyed > 0
    assert lost > 0
    assert destroyed + lost == pytest.approx(100.0 * rates["vented"] / 1e3, rel=1e-9)
