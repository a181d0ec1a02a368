"""The demo's site file fits the simulated plant, and the product finds the truth through it."""

from __future__ import annotations

import dataclasses
import tomllib

import pytest

import monitor.demo.files as demo_files
from monitor.cycle import compute_window
from monitor.demo import DemoError, copy_site, read_truth, write_exports, write_truth
from monitor.demo.design import DESIGN
from monitor.demo.files import config_folder, read_tags
from monitor.demo.layout import MACHINES
from monitor.site.load import load_site
from monitor.sources import open_sources


def test_the_site_file_is_piped_like_the_plant():
    site = load_site(config_folder() / "site.toml")
    piped = {
        item.id: (item.kind.name, set(item.ids("in")), set(item.ids("out")))
        for item in site.items.values()
    }
    assert piped == {m.id: (m.kind, set(m.inlets), set(m.outlets)) for m in MACHINES}


def test_the_site_file_states_the_plants_own_numbers():
    with (config_folder() / "site.toml").open("rb") as file:
        site = tomllib.load(file)
    equipment = {e["id"]: e for e in site["equipment"]}
    streams = {s["id"]: s for s in site["stream"]}
    assert equipment["TG1"]["drive_efficiency"] == DESIGN.drive_efficiency
    assert equipment["TG2"]["drive_efficiency"] == DESIGN.drive_efficiency
    for fuel, value, ratio in zip(
        ("gas", "bark"), DESIGN.heating_value, DESIGN.exergy_ratio, strict=True
    ):
        assert streams[fuel]["lower_heating_value"] == f"{value / 1e6:.1f} MJ/kg"
        assert streams[fuel]["exergy_ratio"] == ratio
    boundaries = {
        "b1_stack": DESIGN.stack_temperature[0],
        "b2_stack": DESIGN.stack_temperature[1],
        "disp_heat": DESIGN.user_temperature[0],
        "bm_heat": DESIGN.user_temperature[1],
        "heat_heat": DESIGN.user_temperature[2],
    }
    for stream, kelvin in boundaries.items():
        assert streams[stream]["boundary_temperature"] == f"{kelvin - 273.15:.0f} degC"


def test_every_tag_is_used_by_the_site():
    site = load_site(config_folder() / "site.toml")
    assert set(site.used_tags()) == {tag.name for tag in read_tags()}


def test_the_plant_stays_inside_its_instruments_ranges(eventful_plant):
    from monitor.demo.instruments import true_value  # noqa: PLC0415 - used once

    for tag in read_tags():
        value = true_value(eventful_plant, tag)
        assert value.min() >= tag.low, tag.name
        assert value.max() <= tag.high, tag.name


def test_a_copied_site_loads_where_it_lands(tmp_path):
    path = copy_site(tmp_path / "new")
    assert load_site(path).id == "alder_reach"


def test_without_the_config_folder_the_error_says_what_to_do(monkeypatch, tmp_path):
    monkeypatch.setattr(demo_files, "__file__", str(tmp_path / "a" / "b" / "files.py"))
    with pytest.raises(DemoError, match="checkout"):
        copy_site(tmp_path / "site")


def test_the_product_finds_the_truth_from_clean_exports(eventful_plan, eventful_plant, tmp_path):
    # Rounded readings, means of five minutes: destroyed exergy within 0.5 %, efficiencies within
    # 0.1 points. The accumulator's rates are differences of rounded levels, so it is left out.
    plan = dataclasses.replace(eventful_plan, noise=False, dirt=False)
    write_exports(eventful_plant, plan, tmp_path)
    write_truth(eventful_plant, tmp_path)
    site = load_site(copy_site(tmp_path))
    start = plan.first_second + 8 * 3600
    end = start + 8 * 3600
    with open_sources(site) as sources:
        batch = compute_window(site, sources, start, end).batch
    truth = read_truth(tmp_path).tables
    rows = slice(8 * 60, 16 * 60)
    mean = batch.equipment.groupby("subject")["destroyed_live_kw"].mean()
    expected = truth["destroyed_live"].iloc[rows].mean() / 1e3
    for machine in ("B1", "B2", "HDR62", "TG1", "HDR4", "BM", "DISP", "HEAT", "TG2", "COND", "DA"):
        assert mean[machine] == pytest.approx(expected[machine], rel=5e-3), machine
    figures = batch.conditions.set_index(["subject", "figure"])["value"]
    for machine, figure in (("TG1", "eta_s_1"), ("TG1", "eta_s_2"), ("TG2", "eta_s_1")):
        known = 100 * truth["conditions"][f"{machine}.{figure}"].iloc[rows].mean()
        assert figures[machine, figure].mean() == pytest.approx(known, abs=0.1)
