"""However readings are delivered, the store ends as one clean pass over them leaves it."""

from __future__ import annotations

import random

import pandas as pd
import pytest

from monitor.commands.opening import opened
from monitor.flags import Flag

FIRST, LAST = "2026-01-11T00:01Z", "2026-01-11T06:01Z"


@pytest.fixture(scope="module")
def clean(make_plant, tmp_path_factory):
    """The plant with everything there from the start."""
    return plant_in(make_plant, tmp_path_factory.mktemp("clean"))


def plant_in(make_plant, folder):
    plant = make_plant(folder, days=1.25)
    plant.edit('look_back = "1 h"', 'look_back = "31 h"')
    return plant


def pieces(readings, dice, *, shuffled):
    """Cut readings into pieces, some of them in two pieces; by tag and time, or by any order."""
    count = dice.randint(4, 6)
    owners = [dice.randrange(count) for _ in range(40)]
    # A stretch of time of one tag belongs to one piece.
    codes = readings["tag"].astype("category").cat.codes.to_numpy()
    block = pd.DatetimeIndex(readings["time"]).as_unit("s").asi8 // 7200
    owner = pd.Series((block * 7 + codes * 13) % len(owners), index=readings.index)
    owner = owner.map(dict(enumerate(owners)))
    cut = [readings[owner == number] for number in range(count)]
    cut = [
        pd.concat([own, readings.sample(50, random_state=dice.randrange(99))]).drop_duplicates()
        for own in cut
    ]
    if shuffled:
        return [own.sample(frac=1, random_state=dice.randrange(99)) for own in cut]
    return [own.sort_values("time") for own in cut]


def unmarked(rows):
    """Stored rows without the remark that a reading stood out of order: that is the files'."""
    rows = rows.drop(columns="out_of_order", errors="ignore")
    return rows.assign(flag=rows["flag"] & ~int(Flag.OUT_OF_ORDER)) if "flag" in rows else rows


@pytest.mark.parametrize(("seed", "shuffled"), [(1, False), (2, False), (3, True)])
def test_pieces_in_any_order_leave_the_store_of_one_clean_pass(
    make_plant, clean, drive, stored, tmp_path, seed, shuffled
):
    dice = random.Random(seed)  # noqa: S311 - no secret, a test's own dice
    at_once = drive(clean, FIRST)
    at_once.daemon.cycle()
    at_once.clock.set(LAST)
    at_once.daemon.cycle()
    plant = plant_in(make_plant, tmp_path / "pieces")
    delivered = pieces(plant.readings, dice, shuffled=shuffled)
    assert sum(map(len, delivered)) > len(plant.readings)
    numbers = list(range(len(delivered)))
    dice.shuffle(numbers)
    plant.write(delivered[numbers[0]], f"piece {numbers[0]}.csv")
    (plant.folder / "exports" / "day.csv").unlink()
    driven = drive(plant, FIRST)
    driven.daemon.cycle()
    for step, number in enumerate(numbers[1:], start=1):
        plant.write(delivered[number], f"piece {number}.csv")
        minutes = 15 + 330 * step // len(numbers)
        driven.clock.set(f"2026-01-11T{minutes // 60:02d}:{minutes % 60:02d}Z")
        driven.daemon.cycle()
    driven.clock.set(LAST)
    driven.daemon.cycle()
    live, past = stored(plant), stored(clean)
    for table, rows in past.items():
        assert len(rows)
        pd.testing.assert_frame_equal(unmarked(live[table]), unmarked(rows))
    assert (live["tag_quality"]["out_of_order"].sum() > 0) == shuffled
    with opened(plant.path) as at, opened(clean.path) as other:
        assert at.store.watermarks() == other.store.watermarks()
        runs = at.store.runs()
    assert runs[-1].message == "1 window"
    told = [run.message for run in runs[:-1]]
    assert all("readings changed since, computed again: " in message for message in told[1:])
    assert "11 tags of dcs from 2026-01-10 00:00 UTC to" in " ".join(told)
    # Nothing came between the last delivery and the last pass.
    assert "changed" not in told[0]


def test_a_value_that_is_corrected_alone_replaces_the_old_figures_and_the_run_says_so(
    make_plant, drive, stored, tmp_path
):
    plant = plant_in(make_plant, tmp_path / "corrected")
    wrong = plant.readings.copy()
    cell = (wrong["tag"] == "FT-6201") & (wrong["time"] == pd.Timestamp("2026-01-10T15:05Z"))
    wrong.loc[cell, "value"] *= 1.01
    plant.write(wrong)
    driven = drive(plant, FIRST)
    driven.daemon.cycle()
    before = stored(plant)["stream_figures"]
    plant.export()
    driven.clock.set("2026-01-11T00:16Z")
    driven.daemon.cycle()
    (corrected, _) = driven.at.store.runs()
    assert corrected.message.endswith(
        "readings changed since, computed again: 1 tag of dcs from 2026-01-10 15:00 UTC to "
        "2026-01-10 16:00 UTC (values alone, as many readings as before)"
    )
    after = stored(plant)["stream_figures"]
    assert not after.head(len(before)).equals(before)


def test_a_reading_that_is_corrected_replaces_the_old_figures_and_the_run_says_so(
    make_plant, drive, stored, tmp_path
):
    plant = plant_in(make_plant, tmp_path / "corrected")
    wrong = plant.readings.copy()
    cell = (wrong["tag"] == "FT-6201") & (wrong["time"] == pd.Timestamp("2026-01-10T15:05Z"))
    wrong.loc[cell, "quality"] = "Bad"
    plant.write(wrong)
    driven = drive(plant, FIRST)
    driven.daemon.cycle()
    plant.export()
    driven.clock.set("2026-01-11T00:16Z")
    driven.daemon.cycle()
    (corrected, _) = driven.at.store.runs()
    assert corrected.message.endswith(
        "readings changed since, computed again: 1 tag of dcs from 2026-01-10 15:00 UTC to "
        "2026-01-10 16:00 UTC"
    )
    right = plant_in(make_plant, tmp_path / "right")
    other = drive(right, FIRST)
    other.daemon.cycle()
    other.clock.set("2026-01-11T00:16Z")
    other.daemon.cycle()
    live, past = stored(plant), stored(right)
    for table, rows in past.items():
        pd.testing.assert_frame_equal(live[table], rows)
