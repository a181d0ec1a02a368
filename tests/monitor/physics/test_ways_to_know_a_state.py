"""Every way in which a site file can state a stream of water, beside iapws."""

from __future__ import annotations

import numpy as np
import pytest
from iapws import IAPWS97
from physics_site import build, last, rows, run, water

from monitor.errors import SiteFileError
from monitor.flags import Flag
from monitor.judging import tags_of_stream

AMBIENT = {"TA": 15.0, "PA": 0.98}
ATMOSPHERE = 0.98


def _site(folder, unit="K", **stated):
    return build(
        folder,
        {
            "in": {"flow": "5 kg/s"} | stated,
            "out": {"pressure": "0.5 bar(a)", "phase": "vapour", "flow": "5 kg/s"},
        },
        {"valve": {"kind": "control_volume", "ports": {"inlet": "in", "outlet": "out"}}},
        {"P": {"unit": "bar(a)"}, "T": {"unit": "degC"}, "P2": {"unit": "bar(g)"},
         "D": {"unit": unit, "range": [-20.0, 80.0]}},
    )  # fmt: skip


def _flag(batch):
    return Flag(int(rows(batch.streams, "in")["flag"].iloc[-1]))


def _matches(batch, expected):
    for column, value in (("enthalpy_kj_kg", expected.h), ("entropy_kj_kgk", expected.s)):
        assert last(batch.streams, "in", column) == pytest.approx(value, rel=1e-8), column
    return True


BOILING = IAPWS97(P=1.2, x=0).T - 273.15


@pytest.mark.parametrize(
    ("stated", "values", "expected"),
    [
        ({"pressure": "P", "temperature": "T"}, {"P": 12.0, "T": 250.0}, water(12, 250)),
        ({"pressure": "P", "dryness": 0.93}, {"P": 12.0}, water(12, x=0.93)),
        ({"temperature": "T", "dryness": 0.93}, {"T": BOILING}, water(12, x=0.93)),
        ({"pressure": "P", "phase": "vapour"}, {"P": 12.0}, water(12, x=1)),
        ({"pressure": "P", "phase": "liquid"}, {"P": 12.0}, water(12, x=0)),
        ({"temperature": "T", "phase": "vapour"}, {"T": BOILING}, water(12, x=1)),
        ({"temperature": "T", "phase": "liquid"}, {"T": BOILING}, water(12, x=0)),
        ({"pressure": "P", "superheat": "D"}, {"P": 12.0, "D": 30.0}, water(12, BOILING + 30)),
        ({"pressure": "P", "superheat": "30 K"}, {"P": 12.0}, water(12, BOILING + 30)),
        ({"pressure": "P", "subcooling": "D"}, {"P": 12.0, "D": 8.0}, water(12, BOILING - 8)),
        ({"pressure": "12 bar(a)", "subcooling": "8 K"}, {}, water(12, BOILING - 8)),
        # Half a kelvin off the line: a gauge of the difference knows the side.
        ({"pressure": "P", "superheat": "D"}, {"P": 12.0, "D": 0.5}, water(12, BOILING + 0.5)),
        ({"pressure": "P", "temperature": "T"}, {"P": 250.0, "T": 390.0}, water(250, 390)),
    ],
)
def test_a_state_is_known_in_every_way_that_a_plant_knows_it(tmp_path, stated, values, expected):
    batch = run(_site(tmp_path, **stated), AMBIENT | values)
    assert _matches(batch, expected)
    assert _flag(batch) == Flag(0)


@pytest.mark.parametrize(
    ("key", "reading", "dryness", "flag"),
    [
        ("superheat", 0.0, 1, Flag.SIDE_ASSUMED),
        ("superheat", -0.7, 1, Flag.SIDE_ASSUMED),
        ("superheat", -4.0, 1, Flag.SIDE_ASSUMED | Flag.UNCERTAIN),
        ("subcooling", -0.7, 0, Flag.SIDE_ASSUMED),
    ],
)
def test_a_degree_on_the_wrong_side_is_saturated_and_says_so(tmp_path, key, reading, dryness, flag):
    batch = run(_site(tmp_path, pressure="P", **{key: "D"}), AMBIENT | {"P": 12.0, "D": reading})
    assert _matches(batch, water(12, x=dryness))
    assert _flag(batch) == flag


@pytest.mark.parametrize(("bar", "degree"), [(12.0, np.nan), (np.nan, 5.0), (250.0, 5.0)])
def test_a_degree_without_a_reading_or_above_critical_is_absent(tmp_path, bar, degree):
    batch = run(_site(tmp_path, pressure="P", superheat="D"), AMBIENT | {"P": bar, "D": degree})
    assert np.isnan(last(batch.streams, "in", "enthalpy_kj_kg"))
    expected = Flag.OUT_OF_REGION if np.isfinite(bar * degree) else Flag.MISSING
    assert _flag(batch) & expected


def _sampled(celsius, bar=ATMOSPHERE):
    """12 bar steam of the sample's enthalpy, by iapws (which solves p, h itself)."""
    return IAPWS97(P=1.2, h=water(bar, celsius).h)


@pytest.mark.parametrize(
    ("test", "values", "celsius", "bar"),
    [
        ({"temperature": "T"}, {"T": 118.0}, 118.0, ATMOSPHERE),
        ({"temperature": "T", "pressure": "P2"}, {"T": 121.0, "P2": 0.1}, 121.0, 1.08),
        ({"temperature": "T", "pressure": "1.01325 bar(a)"}, {"T": 121.0}, 121.0, 1.01325),
    ],
)
def test_a_throttled_sample_tells_the_dryness(tmp_path, test, values, celsius, bar):
    site = _site(tmp_path, pressure="P", throttling_test=test)
    batch = run(site, AMBIENT | {"P": 12.0} | values)
    expected = _sampled(celsius, bar)
    assert 0.95 < expected.x < 1.0
    assert last(batch.streams, "in", "dryness") == pytest.approx(expected.x, abs=1e-7)
    assert last(batch.streams, "in", "enthalpy_kj_kg") == pytest.approx(expected.h, rel=1e-9)
    assert _flag(batch) == Flag(0)
    assert set(tags_of_stream(site, "in")) == {"P", *values}


def test_the_handbook_throttling_calorimeter(tmp_path):
    """Common practice: at 10 bar, expanded to 1 bar and 110 degC: h = 2696 kJ/kg, x = 0.960.

    By the steam tables (10 bar: h_f 762.5, h_fg 2014.6; superheated 1 bar, 110 degC: 2696.3).
    """
    test = {"temperature": "110 degC", "pressure": "1 bar(a)"}
    batch = run(_site(tmp_path, pressure="10 bar(a)", throttling_test=test), AMBIENT)
    assert last(batch.streams, "in", "dryness") == pytest.approx(
        (2696.3 - 762.5) / 2014.6, abs=2e-4
    )


@pytest.mark.parametrize(
    ("over", "present", "flag"),
    [
        (6.0, True, Flag(0)),
        (4.0, True, Flag.NEAR_SATURATION),
        (0.1, True, Flag.NEAR_SATURATION),
        (-0.1, False, Flag.NEAR_SATURATION | Flag.OUT_OF_REGION),
        (-30.0, False, Flag.NEAR_SATURATION | Flag.OUT_OF_REGION),
    ],
)
def test_a_sample_that_is_hardly_superheated_says_nothing_sure(tmp_path, over, present, flag):
    boiling = IAPWS97(P=ATMOSPHERE / 10, x=0).T - 273.15
    site = _site(tmp_path, pressure="P", throttling_test={"temperature": "T"})
    batch = run(site, AMBIENT | {"P": 12.0, "T": boiling + over})
    assert np.isfinite(last(batch.streams, "in", "enthalpy_kj_kg")) == present
    assert _flag(batch) == flag
    wider = _site(
        tmp_path, pressure="P", throttling_test={"temperature": "T", "least_superheat": 10.0}
    )
    assert _flag(run(wider, AMBIENT | {"P": 12.0, "T": boiling + 6.0})) == Flag.NEAR_SATURATION


def test_a_dry_sample_leaves_the_stream_superheated(tmp_path):
    site = _site(tmp_path, pressure="P", throttling_test={"temperature": "T"})
    batch = run(site, AMBIENT | {"P": 12.0, "T": 180.0})
    assert last(batch.streams, "in", "dryness") == 1.0
    assert last(batch.streams, "in", "temperature_degc") == pytest.approx(
        _sampled(180.0).T - 273.15, abs=1e-5
    )


def _doubt(batch):
    return last(batch.streams, "in", "u_exergy_live_kw")


def test_the_gauges_of_every_way_have_their_part_in_the_uncertainty(tmp_path):
    """A kelvin of superheat is a kelvin of temperature; a doubtful sample leaves the phase open."""
    by_temperature = run(
        _site(tmp_path, pressure="P", temperature="T"), AMBIENT | {"P": 12.0, "T": BOILING + 30.0}
    )
    by_superheat = run(
        _site(tmp_path, pressure="P", superheat="D"), AMBIENT | {"P": 12.0, "D": 30.0}
    )
    assert _doubt(by_superheat) == pytest.approx(_doubt(by_temperature), rel=0.05)
    tested = _site(tmp_path, pressure="P", throttling_test={"temperature": "T"})
    sure, unsure = (run(tested, AMBIENT | {"P": 12.0, "T": t}) for t in (120.0, 101.0))
    assert _flag(unsure) == Flag.NEAR_SATURATION
    assert _doubt(unsure) > 5.0 * _doubt(sure)


@pytest.mark.parametrize(
    ("stated", "unit", "said"),
    [
        ({"pressure": "P", "superheat": "D"}, "degC", "is a difference of temperatures"),
        ({"pressure": "P", "superheat": "5 degC"}, "K", "is a difference of temperatures"),
        ({"pressure": "P", "superheat": "D"}, "bar(a)", "a pressure; a temperature is wanted"),
        ({"pressure": "P", "superheat": "0 K"}, "K", "is not above 0 K"),
        ({"pressure": "P", "superheat": "DX"}, "K", "'DX' is not a tag"),
        ({"superheat": "D"}, "K", "it goes with a pressure alone"),
        ({"temperature": "T", "subcooling": "D"}, "K", "it goes with a pressure alone"),
        ({"pressure": "P", "temperature": "T", "superheat": "D"}, "K", "with a pressure alone"),
        ({"pressure": "P", "dryness": 0.9, "superheat": "D"}, "K", "with a pressure alone"),
        ({"pressure": "P", "superheat": "D", "subcooling": "D"}, "K", "keep one"),
        ({"pressure": "P", "superheat": "D", "enthalpy": "balance"}, "K", "keep one"),
        ({"throttling_test": {"temperature": "T"}}, "K", "it goes with a pressure alone"),
        ({"pressure": "P", "throttling_test": {"temperature": "P"}}, "K", "temperature is wanted"),
        ({"pressure": "P", "throttling_test": {"temperature": "T", "pressure": "T"}}, "K",
         "a pressure is wanted"),
        ({"pressure": "P", "throttling_test": {}}, "K", "is missing"),
        ({"pressure": "P", "throttling_test": {"temperature": "T", "margin": 5}}, "K",
         "is not a key of this table"),
        ({"pressure": "P"}, "K", "a superheat or a subcooling"),
    ],
)  # fmt: skip
def test_a_state_said_twice_or_half_is_told_with_the_remedy(tmp_path, stated, unit, said):
    with pytest.raises(SiteFileError, match=said):
        _site(tmp_path, unit=unit, **stated)
