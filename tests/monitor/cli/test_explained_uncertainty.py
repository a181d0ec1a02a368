"""What `explain` says of a figure's uncertainty, and of the instrument behind an impossible one."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from monitor.site.models import Tag
from monitor.uncertainty.budget import Budget, Uncertainties
from monitor.uncertainty.told import budget_of, contributions, excess, suspect

NOON = "2026-01-12T12:00Z"
TAGS = {
    "TT-1": Tag(name="TT-1", source="dcs", unit="degC", uncertainty="0.5 K"),
    "FT-1": Tag(name="FT-1", source="dcs", unit="t/h"),
}


def _lines(**moves):
    budget = Budget(tuple(moves), np.array([[m, m] for m in moves.values()], dtype=float))
    return contributions(budget, 1.0, TAGS, 0)


def test_a_budget_ranks_its_instruments_and_marks_defaults():
    first, second = _lines(**{"TT-1": -3.0, "FT-1": 4.0})
    assert (first.source, first.share) == ("FT-1", 16 / 25)
    assert (first.instrument_class, first.by_default) == ("2 % reading", True)
    assert (second.instrument_class, second.by_default) == ("0.5 K", False)


@pytest.mark.parametrize(
    ("move", "value", "unit", "reads", "multiple"),
    [
        (10.0, -25.0, "kW", "low", 2.5),
        (-10.0, -25.0, "kW", "high", 2.5),
        (0.4, 101.0, "%", "high", 2.5),
        (-0.4, 101.0, "%", "low", 2.5),
    ],
)
def test_the_suspect_reads_where_the_figure_would_become_possible(
    move, value, unit, reads, multiple
):
    found = suspect(_lines(**{"TT-1": move, "FT-1": move / 3}), excess(value, unit))
    assert (found.source, found.reads) == ("TT-1", reads)
    assert found.multiple == pytest.approx(multiple)
    assert f"TT-1 may read too {reads}: 2.5 of its standard uncertainties" in found.sentence


def test_a_possible_figure_suspects_nobody():
    assert suspect(_lines(**{"TT-1": 1.0}), excess(25.0, "kW")) is None
    assert suspect((), -3.0) is None


def test_figures_without_a_budget_have_none():
    assert budget_of(Uncertainties(None), "TG1", "load_kg_s") is None


def test_explain_tells_the_budget_of_an_efficiency(computed, lostwork):
    told = lostwork("explain", computed.path, "TG1", "eta_s_1", "--at", NOON, "--json").json()
    squares = math.fsum(line["moves"] ** 2 for line in told["budget"])
    assert told["uncertainty"] == pytest.approx(math.sqrt(squares), rel=1e-9)
    assert math.fsum(line["share"] for line in told["budget"]) == pytest.approx(1.0)
    assert told["suspect"] == ""
    ran = lostwork("explain", computed.path, "TG1", "eta_s_1", "--at", NOON)
    u = told["uncertainty"]
    assert f"u = {u:.3g} points; expanded (k = 2): +/- {2 * u:.2g} points" in ran.out
    assert "moves it by, points" in ran.out
    assert "% of variance" in ran.out


def test_a_large_uncertainty_is_told_in_whole_digits(computed, lostwork):
    ran = lostwork("explain", computed.path, "live_steam", "exergy_live_kw", "--at", NOON)
    told_so = r"^u = (\S+) kW; expanded \(k = 2\): \+/- (\S+) kW$"
    (told,) = re.findall(told_so, ran.out, re.MULTILINE)
    assert float(told[1]) > 100
    assert all(re.fullmatch(r"[0-9.]+", number) for number in told)
