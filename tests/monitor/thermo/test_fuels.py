"""Fuel exergy ratios: the published correlations, the table, and the fuel without a ratio."""

from __future__ import annotations

import numpy as np
import pytest
from thermo_reference import inputs, rows

from monitor.thermo.fuels import (
    FUELS,
    FuelError,
    exergy_ratio,
    fuel_ratio,
    liquid_fuel_ratio,
    moist_fuel_exergy,
    solid_fuel_ratio,
    wood_fuel_ratio,
)


def _own(name):
    (row,) = rows("fuel_exergy.csv", fuel=name, kind="own evaluation")
    shares = inputs(row["inputs_or_formula"])
    ratios = {k: v / shares["C"] for k, v in shares.items()}
    return ratios, float(row["value"]), float(row["tol"])


def test_hard_coal_by_the_correlation_of_1964():
    # Szargut and Styrylska (1964); own composition, evaluated independently.
    ratio, value, tolerance = _own("hard coal")
    assert solid_fuel_ratio(ratio["H"], ratio["O"], ratio["N"]) == pytest.approx(
        value, abs=tolerance
    )


def test_wood_by_the_correlation_of_1964():
    ratio, value, tolerance = _own("wood")
    assert wood_fuel_ratio(ratio["H"], ratio["O"], ratio["N"]) == pytest.approx(
        value, abs=tolerance
    )


def test_fuel_oil_by_the_correlation_of_1964():
    ratio, value, tolerance = _own("fuel oil")
    assert liquid_fuel_ratio(ratio["H"], ratio["O"], ratio["S"]) == pytest.approx(
        value, abs=tolerance
    )


def test_a_correlation_is_not_stretched_beyond_its_oxygen():
    assert np.isnan(solid_fuel_ratio(0.1, [0.668, -0.01, np.nan], 0.01)).all()
    assert np.isnan(wood_fuel_ratio(0.1, [0.667, 2.68, np.nan], 0.01)).all()
    assert np.isfinite(solid_fuel_ratio(0.1, 0.667, 0.01))
    assert np.isfinite(wood_fuel_ratio(0.1, 2.67, 0.01))


def test_the_two_solid_correlations_meet_within_their_stated_accuracy():
    solid, wood = solid_fuel_ratio(0.12, 0.667, 0.01), wood_fuel_ratio(0.12, 0.6671, 0.01)
    assert wood == pytest.approx(solid, rel=0.01)


def test_later_coefficients_would_change_coal_by_less_than_a_tenth_of_a_percent():
    # Szargut; Morris and Steward (1988), from memory: 1.0437, 0.1896, 0.0617, 0.0428.
    ratio, _, _ = _own("hard coal")
    later = 1.0437 + 0.1896 * ratio["H"] + 0.0617 * ratio["O"] + 0.0428 * ratio["N"]
    assert solid_fuel_ratio(ratio["H"], ratio["O"], ratio["N"]) == pytest.approx(later, rel=1e-3)


@pytest.mark.parametrize(
    ("name", "row_name"),
    [("methane", "methane"), ("ethane", "ethane"), ("propane", "propane"),
     ("butane", "n-butane"), ("carbon", "carbon (graphite)"), ("hydrogen", "hydrogen"),
     ("carbon_monoxide", "carbon monoxide")],
)  # fmt: skip
def test_a_pure_substance_has_exergy_over_heating_value_of_the_published_table(name, row_name):
    # Szargut (2007), chemical exergy and enthalpy of devaluation in kJ/mol.
    (row,) = rows("fuel_exergy.csv", fuel=row_name, kind="component ratio")
    molar = inputs(row["inputs_or_formula"])
    assert exergy_ratio(name) == pytest.approx(molar["e_kJ_mol"] / molar["LHV_kJ_mol"], abs=1e-4)
    assert fuel_ratio(name).from_memory is (row["status"] == "from memory")


@pytest.mark.parametrize(
    ("name", "row_name"),
    [("natural_gas", "natural gas"), ("hard_coal", "hard coal and other coals"),
     ("coke", "coke"), ("peat", "peat"), ("wood", "wood"), ("fuel_oil", "fuel oils and petrol"),
     ("coal_gas", "coal gas"), ("blast_furnace_gas", "blast furnace gas")],
)  # fmt: skip
def test_a_typical_ratio_is_that_of_the_published_range(name, row_name):
    (row,) = rows("fuel_exergy.csv", fuel=row_name, kind="typical ratio")
    fuel = fuel_ratio(name)
    low = float(row["low"] or row["value"])
    high = float(row["high"] or row["value"])
    assert (fuel.low, fuel.high) == (low, high)
    assert fuel.value == pytest.approx(float(row["value"] or (low + high) / 2))


def test_natural_gas_of_a_real_composition_lies_in_the_range():
    (row,) = rows("fuel_exergy.csv", fuel="natural gas", kind="own evaluation")
    gas = fuel_ratio("natural gas")
    assert gas.low <= float(row["value"]) <= gas.high
    assert not gas.from_memory


def test_every_listed_fuel_is_between_its_ends_and_names_its_source():
    for name, fuel in FUELS.items():
        assert fuel.low <= fuel.value <= fuel.high, name
        assert fuel.source, name


def test_black_liquor_has_no_ratio_and_the_user_is_told_to_state_one():
    with pytest.raises(FuelError, match=r"no published ratio.*black liquor; state exergy_ratio"):
        exergy_ratio("black liquor")


def test_a_misspelt_fuel_is_answered_with_the_one_that_was_meant():
    with pytest.raises(FuelError, match=r"'natural_gaz' is not a listed fuel.*'natural_gas'"):
        exergy_ratio("natural_gaz")


def test_a_fuel_may_be_written_with_spaces_and_capitals():
    assert exergy_ratio(" Natural gas ") == exergy_ratio("natural_gas") == 1.04


def test_a_moist_fuel_has_more_exergy_per_lower_heating_value_than_a_dry_one():
    # Rule of Kotas (1985), from memory: ratio_dry (LHV + 2442 w) + 9417 s in kJ/kg.
    wet = moist_fuel_exergy(9.0e6, 1.12, 0.5, 0.001)
    assert wet == pytest.approx((1.12 * (9000 + 2442 * 0.5) + 9417 * 0.001) * 1e3)
    assert wet / 9.0e6 > 1.12
    assert moist_fuel_exergy(9.0e6, 1.12, 0.0) == pytest.approx(1.12 * 9.0e6)
