"""Numbers and words as pages write them."""

from __future__ import annotations

import html
import math

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboards import formats

GAP = "\u202f"
NO_BREAK = "\u00a0"


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (-0.0, "0"),
        (1.0, "1.000"),
        (12.345, "12.35"),
        (999.96, "1 000"),
        (1234.4, "1 234"),
        (123456.0, "123 500"),
        (-9876543.0, "−9 877 000"),
        (0.012345, "0.01235"),
        (0.00001234, "1.234×10⁻⁵"),
        (123456789012.0, "1.235×10¹¹"),
        (math.nan, "–"),
        (math.inf, "–"),
        (None, "–"),
    ],
)
def test_a_number_has_four_significant_digits_and_thin_thousands(value, text):
    assert formats.number(value) == text.replace(" ", GAP)


@given(st.floats(min_value=-9e8, max_value=9e8, allow_nan=False))
def test_what_is_written_is_the_number_to_four_digits(value):
    written = formats.number(value).replace(GAP, "").replace("−", "-")
    if "×10" in written:
        mantissa, exponent = written.split("×10")
        digits = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
        written = f"{mantissa}e{exponent.translate(digits)}"
    # Half a unit of the fourth digit.
    assert float(written) == pytest.approx(value, rel=5.01e-4)


@given(st.floats(min_value=-9e8, max_value=9e8))
def test_no_number_shows_more_than_four_digits_that_mean_anything(value):
    mantissa = formats.number(value).split("×")[0]
    digits = "".join(sign for sign in mantissa if sign.isdigit()).lstrip("0")
    whole = "." not in mantissa
    assert len(digits.rstrip("0") if whole else digits) <= 4


def test_a_number_and_its_unit_do_not_part():
    assert formats.quantity(12.34, "degC") == f"12.34{NO_BREAK}°C"
    assert formats.quantity(0.5, "1", 2) == "0.50"
    assert formats.quantity(math.nan, "kW") == "–"


@pytest.mark.parametrize(
    ("unit", "shown"), [("m^3/h", "m³/h"), ("1/m^4", "1/m⁴"), ("kg m^-2", "kg m⁻²"), ("kW", "kW")]
)
def test_powers_in_a_unit_are_raised(unit, shown):
    assert formats.unit_text(unit) == shown


def test_a_difference_always_has_its_sign():
    assert [formats.signed(x) for x in (1.5, -1.5, 0.0, math.nan)] == ["+1.50", "−1.50", "0", "–"]
    assert formats.signed(-0.25, 2, "K") == f"−0.25{NO_BREAK}K"


@pytest.mark.parametrize(
    ("value", "smallest", "text"),
    [
        (0.03584, 0.5, "0"),
        (81.8163, 0.7, "81.8"),
        (1323.1, 60.0, f"1{GAP}323"),
        (-0.2256, 1.5, "−0.2"),
        (7.40802, 0.0, "7.41"),
        (7.40802, math.nan, "7.41"),
        (1.3e-15, 0.0, "0"),
        (math.nan, 0.5, "–"),
        (None, 0.5, "–"),
    ],
)
def test_a_figure_shows_the_digits_that_its_smallest_change_asks_for(value, smallest, text):
    assert formats.fitting(value, "1", smallest) == text


def test_a_fitted_difference_has_a_sign_unless_it_rounds_to_nothing():
    assert formats.fitting(1.84, "K", 0.5, sign=True) == f"+1.8{NO_BREAK}K"
    assert formats.fitting(0.01, "K", 0.5, sign=True) == f"0{NO_BREAK}K"
    assert formats.fitting(-1.84, "K", 0.5, sign=True) == f"−1.8{NO_BREAK}K"


def test_a_balance_that_closes_to_rounding_is_zero():
    # Sums of doubles leave a residue of some 1e-16 of their terms.
    assert formats.fixed(-6.27e-16, "kg/s", 3) == f"0{NO_BREAK}kg/s"
    assert formats.fixed(0.16870, "kg/s", 3) == f"0.169{NO_BREAK}kg/s"
    assert formats.fixed(0.0865, "degC", 1) == f"0.1{NO_BREAK}°C"
    assert formats.fixed(math.nan, "kW", 1) == "–"


def test_dryness_is_written_where_steam_is_wet():
    assert [formats.wetness(x) for x in (0.0, 0.9134, 1.0, math.nan, None)] == [
        "–", "0.913", "–", "–", "–",
    ]  # fmt: skip


def test_a_share_is_written_in_per_cent():
    assert formats.percent(0.8234) == f"82.3{NO_BREAK}%"
    assert formats.percent(1.0, 0) == f"100{NO_BREAK}%"
    assert formats.percent(math.nan) == "–"


def test_rates_turn_to_megawatts_when_they_are_large():
    small, large = formats.power_column([1.0, 19_999.0]), formats.power_column([1.0, 20_000.0])
    assert (small.unit, large.unit) == ("kW", "MW")
    assert small.text(12346.0) == f"12{GAP}350"
    assert large.text(12346.0) == "12.35"
    assert large.text(-1.0) == "0.00"
    assert large.with_unit(20_000.0) == f"20.00{NO_BREAK}MW"
    assert large.change(500.0) == "+0.50"
    assert large.change(1.0) == "0.00"
    assert large.change(-500.0) == "−0.50"


def test_a_column_of_nothing_but_gaps_is_all_dashes():
    column = formats.power_column([math.nan, None])
    assert [column.text(x) for x in (math.nan, None)] == ["–", "–"]
    assert column.with_unit(math.nan) == "–"


def test_money_has_no_decimals():
    assert formats.money_column([12.3], "EUR").with_unit(12345.6) == f"12{GAP}350{NO_BREAK}EUR"


def test_times_are_written_the_same_in_every_locale():
    time = pd.Timestamp("2026-03-02 06:05", tz="Europe/Helsinki")
    assert formats.moment(time) == "2 Mar 2026 06:05"
    assert formats.moment(None) == formats.moment(pd.NaT) == "–"
    assert formats.span(time, time + pd.Timedelta(hours=8)) == "Mon 2 Mar 2026 06:05 to 14:05"
    assert formats.span(time, time + pd.Timedelta(hours=24)) == (
        "Mon 2 Mar 2026 06:05 to Tue 3 Mar 2026 06:05"
    )


@pytest.mark.parametrize(
    ("minutes", "text"),
    [
        (0, "0 min"),
        (59, "59 min"),
        (60, "1 h"),
        (200, "3 h 20 min"),
        (1440, "1 d"),
        (1860, "1 d 7 h"),
    ],
)
def test_a_length_of_time_has_its_two_largest_units(minutes, text):
    assert formats.duration(pd.Timedelta(minutes=minutes)) == text


@given(st.text(max_size=200), st.integers(2, 60))
def test_a_shortened_text_is_never_longer_than_asked(text, most):
    short = formats.shorten(text, most)
    assert len(short) <= most
    assert short.rstrip("…") in " ".join(text.split()) or short.endswith("…")


@given(st.text(alphabet=st.sampled_from("<>&%{}$\"';ab/#8 "), max_size=60))
def test_a_text_for_a_figure_has_no_tag_or_placeholder_and_reads_back_the_same(text):
    inert = formats.plotly_text(text)
    assert not set(inert) & set("<>$")
    assert "%{" not in inert
    assert html.unescape(inert).replace("\u200b", "") == text


def test_two_percentages_differ_by_points_and_everything_else_by_its_unit():
    assert formats.unit_of_change("%") == "points"
    assert formats.unit_of_change("t/h") == "t/h"
