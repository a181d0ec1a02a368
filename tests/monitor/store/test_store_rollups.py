"""Roll-ups equal what plain pandas makes of the same cells, whatever the order of writing."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import store_samples as samples
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from store_samples import at, window

from monitor.store.read import energy_mwh

DAY = 86400
EXACT = 1e-12  # relative: sums of some thousand numbers in another order
SHIFTS = ("06:00", "14:00", "22:00")

# Local days of 23, 25 and 24 hours; a zone off the full hour; shifts off the full hour; a day
# that has no midnight (the clock goes from 00:00 to 01:00 on 2024-09-08 in Santiago).
PLACES = [
    pytest.param("Europe/Vienna", SHIFTS, "2025-03-29", id="spring"),
    pytest.param("Europe/Vienna", SHIFTS, "2025-10-25", id="autumn"),
    pytest.param("Europe/Vienna", SHIFTS, "2025-01-31", id="month"),
    pytest.param("Asia/Kathmandu", SHIFTS, "2025-05-31", id="quarter-hour-zone"),
    pytest.param("Europe/Vienna", ("05:30", "13:30", "21:30"), "2025-03-29", id="half-hour-shifts"),
    pytest.param("America/Santiago", SHIFTS, "2024-09-07", id="no-midnight"),
]


def write_days(site, first, days, seed=0):
    run_id = site.begin_run("test", "0", "hash")
    for day in range(days):
        site.write(window(first + day * DAY, first + (day + 1) * DAY, seed), run_id)


@pytest.mark.parametrize(("time_zone", "shifts", "first"), PLACES)
def test_rollups_are_the_means_of_their_cells_on_odd_days_too(store, time_zone, shifts, first):
    site = samples.register(store, cal=samples.calendar(time_zone, shifts))
    start = at(first)
    write_days(site, start, 3)
    whole = window(start, start + 3 * DAY)
    for kind in ("stream", "equipment", "site"):
        expected = samples.expected_rollups(whole, kind, time_zone, shifts)
        for resolution, wanted in expected.items():
            found = site.rollups(kind, resolution, start - 40 * DAY, start + 40 * DAY)
            found = found.assign(subject=found["subject"].astype("str"))
            found = found.assign(figure=found["figure"].astype("str")).sort_values(
                ["subject", "figure", "start"], ignore_index=True
            )
            assert found["subject"].tolist() == wanted["subject"].tolist()
            assert found["figure"].tolist() == wanted["figure"].tolist()
            for column in ("mean", "minimum", "maximum"):
                np.testing.assert_allclose(found[column], wanted[column], rtol=EXACT)
            assert found["covered_s"].tolist() == wanted["covered_s"].tolist()
            conditions = found["figure"].isin([f for _, f in samples.FIGURES])
            np.testing.assert_allclose(
                found.loc[conditions, "weight"], wanted.loc[conditions, "weight"], rtol=EXACT
            )


def test_a_spring_day_has_23_hours_and_an_autumn_day_25(store):
    site = samples.register(store)
    for first, hours in (("2025-03-30", 23), ("2025-10-26", 25)):
        write_days(site, at(first) - DAY, 3)
        local = pd.Timestamp(first, tz="Europe/Vienna")
        found = site.rollups("site", "day", local, local + pd.Timedelta("1h"), figures=["p0_bar"])
        assert found["start"].tolist() == [local.tz_convert("UTC")]
        assert found["expected_s"].tolist() == [hours * 3600]


@settings(
    max_examples=4,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)
@given(data=st.data())
def test_any_order_of_windows_written_any_number_of_times_gives_the_same_store(store, data):
    start = at("2025-03-29")
    pieces = [(start + 6 * 3600 * n, start + 6 * 3600 * (n + 1)) for n in range(10)]
    order = data.draw(st.permutations(pieces))
    again = data.draw(st.lists(st.sampled_from(pieces), max_size=3))
    number = len(store.sites())
    plain = samples.register(store, f"plain{number}")
    run_id = plain.begin_run("test", "0", "hash")
    plain.write(window(pieces[0][0], pieces[-1][1]), run_id)
    mixed = samples.register(store, f"mixed{number}")
    run_id = mixed.begin_run("test", "0", "hash")
    for piece in [*again, *order]:
        # Written before with other numbers, in part: the last writing is what counts.
        seed = 1 if piece in again else 0
        mixed.write(window(*piece, seed), run_id)
    for piece in again:
        mixed.write(window(*piece), run_id)
    samples.assert_same(samples.dump(plain), samples.dump(mixed))


def test_a_window_that_ends_within_an_hour_keeps_the_rest_of_that_hour(store):
    start = at("2025-06-01")
    whole, parts = samples.register(store, "whole"), samples.register(store, "parts")
    for site, windows in (
        (whole, [(0, 4 * 3600)]),
        (parts, [(0, 4 * 3600), (0, 2 * 3600 + 900), (3600, 3 * 3600 + 1800)]),
    ):
        run_id = site.begin_run("test", "0", "hash")
        for low, high in windows:
            site.write(window(start + low, start + high), run_id)
    samples.assert_same(samples.dump(whole), samples.dump(parts))


@pytest.mark.parametrize("time_zone", ["Europe/Vienna", "Asia/Kathmandu"])
def test_a_rebuild_gives_the_same_rollups_to_the_last_digit(store, time_zone):
    site = samples.register(store, cal=samples.calendar(time_zone))
    write_days(site, at("2025-10-24"), 9)
    before = samples.dump(site)
    with site.engine.begin() as connection:
        connection.exec_driver_sql("update rollups set mean = -1")
    site.rebuild_rollups()
    samples.assert_same(before, samples.dump(site))


def test_registering_other_shifts_or_another_zone_rolls_up_anew(store):
    site = samples.register(store)
    write_days(site, at("2025-10-24"), 4)
    moved = samples.register(store, cal=samples.calendar("Asia/Tokyo", ("00:00", "08:00", "16:00")))
    fresh = samples.register(
        store, "fresh", samples.calendar("Asia/Tokyo", ("00:00", "08:00", "16:00"))
    )
    write_days(fresh, at("2025-10-24"), 4)
    samples.assert_same(samples.dump(fresh), samples.dump(moved))


def test_figures_that_are_gone_leave_no_rollup_behind(site, run_id):
    start = at("2025-06-01")
    batch = window(start, start + DAY)
    site.write(batch, run_id)
    site.write(samples.without(batch, "conditions", lambda c: c["figure"] != "eta_s_1"), run_id)
    found = site.rollups("equipment", "day", start - DAY, start + DAY, subject="tg1")
    assert "steam_rate" in set(found["figure"])
    assert "eta_s_1" not in set(found["figure"])


def test_an_efficiency_is_the_ratio_of_means_never_the_mean_of_ratios(site, run_id):
    start = at("2025-06-01")
    batch = window(start, start + 3600)
    pieces = batch.equipment
    # Two cells at fuel 10 and 30, product 9 and 15: 24 / 40 = 0.6, where the mean of 0.9 and 0.5
    # would be 0.7.
    pieces["fuel_live_kw"] = np.tile([10.0, 30.0, np.nan, np.nan], 2)
    pieces["product_live_kw"] = np.tile([9.0, 15.0, np.nan, np.nan], 2)
    pieces["fuel_reference_kw"] = 0.0
    site.write(batch, run_id)
    found = site.efficiencies("hour", start, start + 3600, subject="tg1")
    assert found["psi_live"].tolist() == [pytest.approx(0.6)]
    assert found["psi_reference"].isna().all()


def test_energy_counts_only_the_time_that_has_values(site, run_id):
    start = at("2025-06-01")
    batch = window(start, start + 3600)
    batch.ledger["destroyed_live_kw"] = [1000.0, 2000.0, np.nan, 3000.0]
    site.write(batch, run_id)
    found = site.rollups("site", "hour", start, start + 3600, figures=["destroyed_live_kw"])
    # 2000 kW on average over three quarters of an hour.
    assert energy_mwh(found).tolist() == [pytest.approx(1.5)]
    assert found["covered_s"].tolist() == [2700]
    assert found["expected_s"].tolist() == [3600]


@pytest.mark.parametrize("kind", ["stream", "equipment", "site"])
def test_means_over_a_stretch_agree_from_hours_and_from_cells(site, run_id, kind):
    start = at("2025-06-01")
    site.write(window(start, start + DAY), run_id)
    from_hours = site.means(kind, start, start + 6 * 3600)
    # The same cells, but the stretch begins before there are any, off the full hour.
    from_cells = site.means(kind, start - 900, start + 6 * 3600)
    assert len(from_hours) > 10
    pd.testing.assert_frame_equal(
        from_hours.drop(columns="expected_s"), from_cells.drop(columns="expected_s"), rtol=EXACT
    )
    assert set(from_cells["expected_s"]) == {6 * 3600 + 900}
