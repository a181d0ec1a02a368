"""Exports as plants write them: every kind is read to the same readings as the clean one."""

from __future__ import annotations

import awkward
import pandas as pd
import pytest

from connectors import open_source
from connectors.base import Window

ALL = Window(pd.Timestamp("2026-01-31", tz="UTC"), pd.Timestamp("2026-02-01", tz="UTC"))


@pytest.mark.parametrize("name", awkward.KINDS)
def test_every_kind_of_export_gives_the_readings_of_the_clean_one(tmp_path, name):
    written = awkward.KINDS[name](tmp_path)
    source = open_source(written.kind, {"path": "*.csv", **written.options}, tmp_path)
    result = source.read(awkward.TAGS, ALL)
    source.close()
    expected = awkward.expected(with_quality=written.with_quality)
    pd.testing.assert_frame_equal(result.readings, expected)
    assert {p.what.split(":")[0] for p in result.problems} == written.problems


@pytest.mark.parametrize("name", awkward.KINDS)
def test_a_probe_of_every_kind_finds_the_tags_and_the_span(tmp_path, name):
    written = awkward.KINDS[name](tmp_path)
    source = open_source(written.kind, {"path": "*.csv", **written.options}, tmp_path)
    probe = source.probe()
    source.close()
    times = awkward.expected()["time"]
    assert set(probe.tags) == set(awkward.TAGS)
    assert (probe.first, probe.last) == (times.min(), times.max())
