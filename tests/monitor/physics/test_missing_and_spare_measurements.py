"""A site file says which measurement is missing, or spare, before anything runs."""

from __future__ import annotations

import pytest
from physics_site import build

from monitor.equipment.solve import spare_measurements
from monitor.errors import SiteFileError

STEAM = {"pressure": "12 bar(a)", "temperature": "240 degC"}
TAGS = {name: {"unit": "kg/s"} for name in ("FI", "FA", "FB")} | {"T": {"unit": "degC"}}


def _header(folder, **flows):
    streams = {name: STEAM | {"flow": flow} for name, flow in flows.items()}
    outlets = [name for name in flows if name != "in"]
    equipment = {"HDR": {"kind": "header", "ports": {"inlet": "in", "outlet": outlets}}}
    return build(folder, streams, equipment, TAGS)


def test_two_unknown_flows_at_one_header_name_what_to_measure(tmp_path):
    with pytest.raises(SiteFileError) as raised:
        _header(tmp_path, **{"in": "FI", "a": "balance", "b": "balance"})
    told = str(raised.value)
    assert "the mass balance of HDR has more unknowns than equations" in told
    assert "at HDR measure the flow of 'a' or the flow of 'b'" in told


def test_an_exactly_determined_header_has_nothing_to_spare(tmp_path):
    site = _header(tmp_path, **{"in": "FI", "a": "FA", "b": "balance"})
    assert spare_measurements(site.items["HDR"]) == {}


def test_an_over_determined_header_names_the_meters_of_which_one_is_spare(tmp_path):
    site = _header(tmp_path, **{"in": "FI", "a": "FA", "b": "FB"})
    assert spare_measurements(site.items["HDR"]) == {"mass": ("FI", "FA", "FB")}


def test_an_energy_residual_that_is_the_heat_loss_already_is_told_with_its_remedy(tmp_path):
    streams = {"in": STEAM | {"flow": "FI"}, "a": {"pressure": "11 bar(a)", "flow": "FA"}}
    streams["a"]["enthalpy"] = "balance"
    equipment = {"HDR": {"kind": "header", "ports": {"inlet": "in", "outlet": "a"}}}
    with pytest.raises(SiteFileError) as raised:
        build(tmp_path, streams, equipment, TAGS)
    told = str(raised.value)
    assert "heat_loss = 'none' frees it" in told
    assert "at HDR measure the state of 'a'" in told


def test_a_spare_energy_balance_names_powers_flows_and_thermometers(tmp_path):
    streams = {
        "in": {"pressure": "40 bar(a)", "temperature": "420 degC", "flow": "FI"},
        "out": {"pressure": "4 bar(a)", "temperature": "T", "flow": "balance"},
        "w": {"medium": "power", "power": "W"},
    }
    ports = {"inlet": "in", "exhaust": "out", "power": "w"}
    site = build(
        tmp_path,
        streams,
        {"TG": {"kind": "turbine", "ports": ports}},
        TAGS | {"W": {"unit": "kW"}},
    )
    assert spare_measurements(site.items["TG"]) == {"energy": ("FI", "T", "W")}
