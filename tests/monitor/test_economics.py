"""Unit costs of exergy, against an example solved by hand and the balance of costs."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.economics import (
    Prices,
    cost_of_losses,
    fuel_unit_costs,
    supplied_emissions,
    supplied_fuel,
    supplied_prices,
    unit_costs,
)
from monitor.errors import SiteFileError
from monitor.site.load import load_site

# Gas and feed water make steam, a turbine takes it down to the users, condensate comes back.
SITE = """
[site]
id = "cogeneration"
name = "A small cogeneration plant"
[dead_state]
temperature = "15 degC"
pressure = "1 bar(a)"
[economics]
exergy_price = 50.0
co2 = 250.0
[[source]]
id = "dcs"
kind = "csv"
path = "*.csv"

[[stream]]
id = "gas"
medium = "fuel"
flow = "2 kg/s"
lower_heating_value = "48 MJ/kg"
exergy_ratio = 1.04
price = 31.2
co2 = 202.8
[[stream]]
id = "pumping"
medium = "power"
power = "500 kW"
price = 60.0
[[stream]]
id = "steam"
flow = "30 kg/s"
pressure = "60 bar(a)"
temperature = "480 degC"
[[stream]]
id = "stack"
medium = "heat"
heat = "balance"
boundary_temperature = "130 degC"
[[stream]]
id = "exhaust"
flow = "balance"
pressure = "4 bar(a)"
temperature = "190 degC"
[[stream]]
id = "electricity"
medium = "power"
power = "20 MW"
[[stream]]
id = "condensate"
flow = "30 kg/s"
pressure = "4 bar(a)"
temperature = "90 degC"
[[stream]]
id = "heating"
medium = "heat"
heat = "balance"
boundary_temperature = "110 degC"
counts_as = "used"
[[stream]]
id = "feed"
flow = "balance"
pressure = "80 bar(a)"
enthalpy = "balance"

[[equipment]]
id = "boiler"
kind = "boiler"
heat_loss = "none"
ports = { fuel = "gas", feedwater = "feed", steam = "steam", loss = "stack" }
[[equipment]]
id = "turbine"
kind = "turbine"
ports = { inlet = "steam", exhaust = "exhaust", power = "electricity" }
[[equipment]]
id = "user"
kind = "user"
ports = { steam = "exhaust", condensate = "condensate", heat = "heating" }
[[equipment]]
id = "pump"
kind = "pump"
ports = { inlet = "condensate", power = "pumping", outlet = "feed" }
"""

RATES = {
    "gas": 100.0, "pumping": 0.5, "steam": 45.0, "stack": 2.0, "exhaust": 20.0,
    "electricity": 20.0, "condensate": 1.5, "heating": 14.0, "feed": 1.8,
}  # fmt: skip
DESTROYED = {"boiler": 54.8, "turbine": 5.0, "user": 4.5, "pump": 0.2}


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    path = tmp_path_factory.mktemp("economics") / "site.toml"
    path.write_text(SITE, encoding="utf-8")
    return load_site(path)


def test_unit_costs_meet_the_example_solved_by_hand(site):
    """Own example. F rule: c(exhaust) = c(condensate) = c(steam) = c.

    Pump: 1.8 c(feed) = 1.5 c + 0.5 * 60. Boiler: 45 c = 100 * 30 + 1.8 c(feed), the stack free.
    So 43.5 c = 3030 and c = 69.6552. Turbine: 20 c(power) = (45 - 20) c; user: 14 c(heat) =
    (20 - 1.5) c.
    """
    prices = supplied_prices(site)
    # 31.2 per MWh of heating value is 30 per MWh of exergy at a ratio of 1.04.
    assert prices.supplied == {"gas": pytest.approx(30.0), "pumping": 60.0}
    got = unit_costs(site, RATES, prices)
    c = 3030 / 43.5
    expected = {
        "gas": 30.0,
        "pumping": 60.0,
        "steam": c,
        "stack": 0.0,
        "exhaust": c,
        "condensate": c,
        "feed": (1.5 * c + 30.0) / 1.8,
        "electricity": 25 * c / 20,
        "heating": 18.5 * c / 14,
    }
    assert got.streams == pytest.approx(expected, rel=1e-12)
    assert got.streams["electricity"] == pytest.approx(87.069, abs=5e-4)
    assert got.streams["heating"] == pytest.approx(92.044, abs=5e-4)
    assert got.flat == {}


def test_what_is_destroyed_costs_what_its_fuel_costs(site):
    prices = supplied_prices(site)
    costs = unit_costs(site, RATES, prices)
    fuel = fuel_unit_costs(site, RATES, costs, prices)
    c = 3030 / 43.5
    assert fuel == pytest.approx({"boiler": 30.0, "turbine": c, "user": c, "pump": 60.0})
    lost = cost_of_losses(site, {k: 1000 * v for k, v in RATES.items()}, costs, prices)
    assert lost == {"stack": pytest.approx(2.0 * 30.0)}


def test_a_lost_product_is_charged_without_what_its_producer_destroys(tmp_path):
    """Own example: steam of 10 at 100 gives up 9; cooling water of 4 at 40 is lost as 7.

    It costs 4 * 40 + 9 * 100 = 1060; of that 6 * 100 is destruction, so the loss is 460.
    """
    stream = '[[stream]]\nid = "{}"\npressure = "1 bar(a)"\nphase = "{}"\nflow = "1 kg/s"\n'
    text = SITE.split("[[stream]]", maxsplit=1)[0] + "".join(
        [
            *(stream.format(s, "liquid") for s in ("cold", "warm", "drain")),
            stream.format("exhaust", "vapour"),
            '[[equipment]]\nid = "box"\nkind = "condenser"\n',
            'ports = { steam = "exhaust", cooling_in = "cold",',
            ' condensate = "drain", cooling_out = "warm" }\n',
        ]
    )
    path = tmp_path / "site.toml"
    path.write_text(text, encoding="utf-8")
    condensing = load_site(path)
    rates = {"exhaust": 10e3, "drain": 1e3, "cold": 4e3, "warm": 7e3}
    prices = Prices({"exhaust": 100.0, "cold": 40.0}, flat=50.0)
    costs = unit_costs(condensing, rates, prices)
    assert costs.streams["warm"] == pytest.approx(1060 / 7)
    fuel = fuel_unit_costs(condensing, rates, costs, prices)
    assert 6 * fuel["box"] == pytest.approx(600.0)
    lost = cost_of_losses(condensing, rates, costs, prices)
    assert lost == {"warm": pytest.approx(460.0), "drain": pytest.approx(100.0)}


def test_what_comes_in_is_paid_for_by_what_is_used(site):
    costs = unit_costs(site, RATES, supplied_prices(site)).streams
    paid = RATES["gas"] * costs["gas"] + RATES["pumping"] * costs["pumping"]
    used = sum(RATES[s] * costs[s] for s in ("electricity", "heating"))
    assert used == pytest.approx(paid, rel=1e-12)


def test_fuel_is_counted_where_it_is_burnt_and_carried_on_like_money(site):
    """All that leaves as used carries the fuel of the site, and power from outside carries none."""
    supplied = supplied_fuel(site)
    assert supplied.supplied == {"gas": pytest.approx(1 / 1.04), "pumping": 0.0}
    carried = unit_costs(site, RATES, supplied).streams
    burnt = RATES["gas"] / 1.04
    assert sum(RATES[s] * carried[s] for s in ("electricity", "heating")) == pytest.approx(burnt)


def test_carbon_is_passed_on_by_the_same_rules(site):
    emissions = supplied_emissions(site)
    # 202.8 kg per MWh of heating value at a ratio of 1.04; the site's own for what says nothing.
    assert emissions.supplied == {"gas": pytest.approx(195.0), "pumping": 250.0}
    got = unit_costs(site, RATES, emissions).streams
    c = (100 * 195.0 + 0.5 * 250.0) / 43.5
    assert got["electricity"] == pytest.approx(25 * c / 20)


rate = st.floats(0.5, 1.0)


@settings(max_examples=50, deadline=None)
@given(rate, rate, rate, rate, st.floats(1.0, 100.0), st.floats(0.001, 1000.0))
def test_costs_close_scale_with_prices_and_know_no_unit_of_rates(site, a, b, c, d, price, unit):
    rates = {
        **RATES,
        "steam": 45 * a,
        "exhaust": 20 * a * b,
        "electricity": 20 * a * c,
        "heating": 14 * d,
    }
    prices = Prices({"gas": price, "pumping": 2 * price}, flat=price)
    got = unit_costs(site, rates, prices).streams
    paid = 100 * price + 0.5 * 2 * price
    used = rates["electricity"] * got["electricity"] + rates["heating"] * got["heating"]
    assert used == pytest.approx(paid, rel=1e-9)
    assert min(got.values()) >= 0
    other = unit_costs(site, {k: unit * v for k, v in rates.items()}, prices).streams
    assert other == pytest.approx(got, rel=1e-9)
    twice = Prices({"gas": 2 * price, "pumping": 4 * price}, flat=price)
    double = {k: 2 * v for k, v in got.items()}
    assert unit_costs(site, rates, twice).streams == pytest.approx(double, rel=1e-9)


def test_worse_machines_make_dearer_products(site):
    prices = supplied_prices(site)
    worn = {**RATES, "electricity": 19.0}
    before, after = unit_costs(site, RATES, prices), unit_costs(site, worn, prices)
    assert after.streams["electricity"] > before.streams["electricity"]
    assert after.streams["heating"] == pytest.approx(before.streams["heating"])


def test_equipment_at_rest_has_the_flat_price_and_says_so(site):
    still = {**RATES, "electricity": 0.0, "exhaust": 0.0, "heating": 0.0, "condensate": 0.0}
    got = unit_costs(site, still, supplied_prices(site))
    assert got.streams["electricity"] == 50.0
    assert got.flat["electricity"] == "'turbine' makes no product"
    assert all(math.isfinite(c) for c in got.streams.values())


def test_an_absent_rate_is_told_and_leaves_the_rest_priced(site):
    rates = {**RATES, "condensate": math.nan}
    got = unit_costs(site, rates, supplied_prices(site))
    assert got.flat == {"condensate": "its exergy rate is absent"}
    assert got.streams["condensate"] == 50.0
    assert got.streams["electricity"] == pytest.approx(25 * (3000 + 30) / 45 / 20)
    none = unit_costs(site, {}, supplied_prices(site))
    assert set(none.flat) == set(site.streams) - {"gas", "pumping"}
    assert none.streams["pumping"] == 60.0


def test_what_a_vessel_stores_is_not_paid_for_by_what_leaves_it(site):
    """As if the turbine held steam back: 2 of its 25 stay inside."""
    prices = supplied_prices(site)
    got = unit_costs(site, RATES, prices, stored={"turbine": 2.0}).streams
    assert got["electricity"] == pytest.approx(23 * got["steam"] / 20)


def test_a_loop_that_nothing_leaves_falls_back_to_the_flat_price(tmp_path):
    text = SITE.split("[[stream]]", maxsplit=1)[0] + _ring()
    path = tmp_path / "ring.toml"
    path.write_text(text, encoding="utf-8")
    ring = load_site(path)
    got = unit_costs(ring, {"a": 5.0, "b": 5.0, "in": 1.0}, Prices({"in": 20.0}, flat=33.0))
    assert got.streams == {"a": 33.0, "b": 33.0, "in": 20.0}
    assert "no single solution" in got.flat["a"]
    assert "in" not in got.flat


def _ring():
    stream = '[[stream]]\nid = "{}"\npressure = "4 bar(a)"\nphase = "vapour"\nflow = "1 kg/s"\n'
    box = '[[equipment]]\nid = "{}"\nkind = "header"\nports = {{ inlet = {}, outlet = "{}" }}\n'
    return "".join(
        [
            *(stream.format(s) for s in ("a", "b", "in")),
            box.format("one", '["a", "in"]', "b"),
            box.format("two", '"b"', "a"),
        ]
    )


CONDENSING = {
    "gas": 100.0, "pumping": 0.5, "steam": 44.0, "electricity": 32.0, "exhaust": 6.0,
    "condensate": 0.3, "feed": 0.7, "cold": 0.4, "warm": 2.4,
}  # fmt: skip


def _condensing(folder, further="", warm=""):
    """Boiler, turbine, condenser and pump; prices and streams as in the other example."""
    stream = '[[stream]]\nid = "{}"\npressure = "1 bar(a)"\nphase = "liquid"\nflow = "1 kg/s"\n'
    head = SITE.split("[[equipment]]", maxsplit=1)[0]
    streams = [f"[[stream]]{part}" for part in head.split("[[stream]]")]
    kept = [s for s in streams if any(f'id = "{k}"' in s for k in CONDENSING)]
    text = SITE.split("[[stream]]", maxsplit=1)[0] + "".join(
        [
            *kept,
            stream.format("cold") + "price = 10.0\n",
            stream.format("warm") + warm,
            further,
            '[[equipment]]\nid = "boiler"\nkind = "boiler"\n',
            'ports = { fuel = "gas", feedwater = "feed", steam = "steam" }\n',
            '[[equipment]]\nid = "turbine"\nkind = "turbine"\n',
            'ports = { inlet = "steam", exhaust = "exhaust", power = "electricity" }\n',
            '[[equipment]]\nid = "condenser"\nkind = "condenser"\nports = { cooling_in = "cold",',
            f" steam = {['exhaust', 'dumped'] if further else ['exhaust']},".replace("'", '"'),
            ' condensate = "condensate", cooling_out = "warm" }\n',
            '[[equipment]]\nid = "pump"\nkind = "pump"\n',
            'ports = { inlet = "condensate", power = "pumping", outlet = "feed" }\n',
        ]
    )
    path = folder / "site.toml"
    path.write_text(text, encoding="utf-8")
    return load_site(path)


def test_power_pays_for_the_condenser_whose_water_goes_to_waste(tmp_path):
    """Own example. F rule: c(exhaust) = c(condensate) = c(steam) = c.

    Pump: 0.7 c(feed) = 0.3 c + 0.5 * 60. Boiler: 44 c = 100 * 30 + 0.7 c(feed), so 43.7 c = 3030.
    The turbine spends 44 - 6, the condenser 6 - 0.3, and cooling water of 0.4 costs 10:
    32 c(power) = 38 c + 5.7 c + 4 = 3030 + 4, which is all that comes in.
    """
    site = _condensing(tmp_path)
    prices = supplied_prices(site)
    got = unit_costs(site, CONDENSING, prices)
    c = 3030 / 43.7
    assert got.streams["exhaust"] == pytest.approx(c)
    assert got.streams["electricity"] == pytest.approx(3034 / 32)
    assert got.streams["warm"] == pytest.approx(0.0, abs=1e-9)
    assert got.flat == {}
    # What is destroyed and lost there is charged as before, to tell where to look.
    assert fuel_unit_costs(site, CONDENSING, got, prices)["condenser"] == pytest.approx(c)
    rates = {k: 1e3 * v for k, v in CONDENSING.items()}
    lost = cost_of_losses(site, rates, got, prices)
    assert lost == {"warm": pytest.approx((2.4 - 0.4) * c + 0.4 * 10)}


def test_cooling_water_that_heats_a_town_pays_for_its_steam_itself(tmp_path):
    site = _condensing(tmp_path, warm='counts_as = "used"\n')
    got = unit_costs(site, CONDENSING, supplied_prices(site)).streams
    c = 3030 / 43.7
    assert got["electricity"] == pytest.approx(38 * c / 32)
    assert got["warm"] == pytest.approx((5.7 * c + 4) / 2.4)


def test_steam_that_no_turbine_let_out_is_not_charged_to_its_power(tmp_path):
    """Another 2 of steam at 50 come from outside: a quarter of what the condenser takes."""
    dumped = '[[stream]]\nid = "dumped"\npressure = "1 bar(a)"\nphase = "vapour"\nflow = "1 kg/s"\n'
    site = _condensing(tmp_path, further=dumped)
    got = unit_costs(site, CONDENSING | {"dumped": 2.0}, supplied_prices(site)).streams
    spent = 7.7 * (6 * got["steam"] + 2 * 50) / 8 + 4
    assert 32 * got["electricity"] == pytest.approx(38 * got["steam"] + 0.75 * spent)
    assert 2.4 * got["warm"] == pytest.approx(0.25 * spent)


def test_a_turbine_at_rest_is_charged_nothing(tmp_path):
    site = _condensing(tmp_path)
    got = unit_costs(site, CONDENSING | {"electricity": 0.0}, supplied_prices(site))
    assert got.streams["electricity"] == 50.0
    assert got.streams["warm"] > 0


def test_a_price_belongs_to_what_enters_the_site(tmp_path):
    path = tmp_path / "site.toml"
    path.write_text(
        SITE.replace('id = "steam"\nflow', 'id = "steam"\nprice = 20.0\nflow'), encoding="utf-8"
    )
    with pytest.raises(SiteFileError, match=r"'steam', price: is for streams that enter"):
        load_site(path)
