"""Exports that were damaged at random: nothing stops the reader, and every row is accounted for."""

from __future__ import annotations

import random
import re

import pandas as pd
import pytest

from connectors import open_source
from connectors.base import Window

EVER = Window(pd.Timestamp("1900-01-01", tz="UTC"), pd.Timestamp("2199-12-31", tz="UTC"))
FILES, LINES = 200, 500
HEADER = b"time,tag,value,quality\n"
ODD = [b'"', b",", b"\n", b"\r", b"\r\n", b"\x00", b"\xff", b"\xc3", b" ", b"-", b"9", b"e", b"\t",
       b"nan", b"inf", b"Bad", "°".encode(), b"2026", b"''", b";"]  # fmt: skip
REFUSED = ("row dropped", "reading given again")


def damaged(line, chance):
    """A line with one to three random edits: cut, doubled, swapped, overwritten, inserted."""
    for _ in range(chance.randint(1, 3)):
        at = chance.randrange(len(line) + 1)
        to = min(len(line), at + chance.randint(0, 12))
        line = chance.choice(
            [
                line[:at] + line[to:],
                line[:to] + line[at:],
                line[:at] + chance.choice(ODD) + line[at:],
                line[:at] + chance.randbytes(chance.randint(1, 3)) + line[to:],
                line[:at],
                line[at:to] + line[:at] + line[to:],
            ]
        )
    return line


def export(chance, *, share):
    lines = [
        b"2026-01-31 %02d:%02d:%02d,62-PT-%03d,%d.5,Good"
        % (n // 60 % 24, n % 60, n // 250, n % 7, n)
        for n in range(LINES)
    ]
    return b"\n".join(
        [damaged(line, chance) if chance.random() < share else line for line in lines]
    )


def rows_in(body):
    """The rows that a CSV parser must see: lines that hold anything."""
    return sum(1 for line in re.split(rb"\r\n|\n|\r", body) if line)


@pytest.mark.parametrize("share", [0.02, 1.0], ids=["a few lines", "every line"])
def test_rows_read_and_rows_refused_are_the_rows_in_the_file(tmp_path, share):
    chance = random.Random(20260131)  # noqa: S311 - a test's own dice
    wrong, kinds = [], set()
    for number in range(FILES):
        body = export(chance, share=share) + b"\n"
        path = tmp_path / "export.csv"
        path.write_bytes(HEADER + body)
        source = open_source("csv", {"path": "export.csv", "quality_column": "quality"}, tmp_path)
        tags = source.probe().tags
        result = source.read(tags, EVER)
        source.close()
        refused = sum(p.count for p in result.problems if p.what.startswith(REFUSED))
        kinds |= {problem.what.split(" (first")[0] for problem in result.problems}
        if len(result.readings) + refused != rows_in(body):
            wrong.append((number, rows_in(body), len(result.readings), refused))
    assert wrong == []
    if share == 1:
        assert len(kinds) >= 6


@pytest.mark.parametrize(
    "options",
    [
        {"layout": "wide"},
        {"time_format": "day_first", "delimiter": ";", "decimal": ",", "thousands": "."},
        {"time_format": "%Y-%m-%d %H:%M:%S", "encoding": "cp1252", "time_zone": "Europe/Vienna"},
        {"time_format": "serial_1900", "time_column": "value", "value_column": "time"},
        {"time_column": ["time", "quality"], "states": {"Good": 1}},
        {"quality_column": "quality", "quality_kind": "opc_ua", "comment": "#", "skip_lines": 1},
        {"encoding": "utf-16-le"},
    ],
    ids=["wide", "day first", "format", "serial", "two columns", "opc", "utf-16"],
)
def test_nothing_stops_the_reader_whatever_the_source_says(tmp_path, options):
    chance = random.Random(7)  # noqa: S311 - a test's own dice
    read = 0
    for number in range(30):
        text = HEADER * (2 if "skip_lines" in options else 1) + export(chance, share=0.3)
        if "serial" in str(options):
            text = text.replace(b"2026-01-31", b"46053")
        if options.get("delimiter"):
            text = text.replace(b",", b";").replace(b"2026-01-31", b"31.01.2026")
        if options.get("encoding") == "utf-16-le":
            text = text.decode("latin-1").encode("utf-16-le")
        (tmp_path / f"{number}.csv").write_bytes(text + b"\n")
    source = open_source("csv", {"path": "*.csv", **options}, tmp_path)
    tags = source.probe().tags
    result = source.read(tags, EVER)
    read = len(result.readings)
    assert read + sum(problem.count for problem in result.problems) >= 30 * LINES * 0.9
    assert all(problem.where and problem.what for problem in result.problems)
