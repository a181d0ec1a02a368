"""A store that comes back without the last of what it had taken is filled again."""

from __future__ import annotations

import sqlite3
from contextlib import closing

import pandas as pd


def test_a_store_put_back_from_an_older_copy_under_a_running_daemon(
    make_plant, drive, stored, tmp_path
):
    # As a database does that crashed with commits that were not on its disk yet.
    lost, calm = (make_plant(tmp_path / name) for name in "ab")
    driven = drive(lost, "2026-01-11T10:46Z")
    driven.daemon.cycle()
    with (
        closing(sqlite3.connect(lost.folder / "figures.sqlite")) as live,
        closing(sqlite3.connect(tmp_path / "copy.sqlite")) as copy,
    ):
        live.backup(copy)
        # To a full hour, from where the daemon need not look back but for what it lost.
        driven.clock.set("2026-01-11T11:01Z")
        driven.daemon.cycle()
        copy.backup(live)
    assert driven.at.store.newest() == pd.Timestamp("2026-01-11T10:30Z")
    driven.clock.set("2026-01-11T11:16Z")
    driven.daemon.cycle()
    assert driven.daemon.health.jobs["cycle"].cause == ""
    straight = drive(calm, "2026-01-11T10:46Z")
    straight.daemon.cycle()
    straight.clock.set("2026-01-11T11:16Z")
    straight.daemon.cycle()
    found, expected = stored(lost), stored(calm)
    for table, rows in expected.items():
        pd.testing.assert_frame_equal(found[table], rows, obj=table)
