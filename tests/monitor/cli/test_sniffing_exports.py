"""check --sniff: a proposal for an export that nobody has described yet."""

from __future__ import annotations

import gzip
import tomllib
from contextlib import closing

import pandas as pd
import pytest

import connectors
from connectors.base import Window

LONG = "time,tag,value,quality\n" + "".join(
    f"2026-01-31T0{h}:{m:02d}:00Z,{tag},{10 + m},Good\n"
    for h in range(3)
    for m in range(0, 60, 20)
    for tag in ("62-PT-001", "62-TT-001")
)
WIDE_LOCAL = "Zeit;Dampf [t/h];Druck Süd\n;t/h;bar(g)\n" + "".join(
    f"31.01.2026 {h:02d}:00:00;12,{h};1.061,5\n" for h in range(12)
)
EPOCH = "stamp,name,reading\n" + "".join(f"{1769817600 + 60 * n},FT-1,{n}.5\n" for n in range(30))
US = "Exported by shift\n\nWhen,FT-1,FT-2\n" + "".join(
    f"1/{day}/2026 6:00 PM,1.5,2.5\n" for day in range(10, 30)
)
TWO_COLUMNS = "date|clock|FT-1\n" + "".join(f"2026-01-31|{h:02d}:30:00|{h}\n" for h in range(24))
AMBIGUOUS = "time,FT-1\n" + "".join(f"0{d}.02.2026 00:00:00,{d}\n" for d in range(1, 10))


@pytest.mark.parametrize(
    ("text", "encoding", "expected", "tags", "first"),
    [
        (
            LONG,
            "utf-8",
            {
                "layout": "long", "tag_column": "tag", "value_column": "value",
                "quality_column": "quality", "time_column": "time", "time_format": "iso",
            },
            {"62-PT-001", "62-TT-001"},
            "2026-01-31T00:00Z",
        ),
        (
            WIDE_LOCAL,
            "cp1252",
            {
                "encoding": "cp1252", "layout": "wide",
                "time_column": "Zeit", "time_format": "day_first",
                "delimiter": ";", "decimal": ",", "thousands": ".", "rows_after_header": 1,
            },
            {"Dampf [t/h]", "Druck Süd"},
            "2026-01-31T00:00Z",
        ),
        (
            LONG,
            "utf-16",
            {"encoding": "utf-16", "layout": "long"},
            {"62-PT-001", "62-TT-001"},
            "2026-01-31T00:00Z",
        ),
        (
            EPOCH,
            "utf-8",
            {"time_format": "epoch_s", "time_column": "stamp", "value_column": "reading"},
            {"FT-1"},
            "2026-01-31T00:00Z",
        ),
        (
            US,
            "utf-8",
            {"time_format": "month_first", "skip_lines": 2, "layout": "wide"},
            {"FT-1", "FT-2"},
            "2026-01-10T18:00Z",
        ),
        (
            TWO_COLUMNS,
            "utf-8",
            {"time_column": ["date", "clock"], "delimiter": "|"},
            {"FT-1"},
            "2026-01-31T00:30Z",
        ),
    ],
    ids=["long", "wide local", "utf-16", "epoch", "month first", "two columns"],
)  # fmt: skip
def test_a_proposal_reads_the_export(lostwork, tmp_path, text, encoding, expected, tags, first):
    (tmp_path / "export.csv").write_text(text, encoding=encoding)
    ran = lostwork("check", "--sniff", tmp_path / "export.csv")
    assert ran.code == 0, ran.err
    read = tomllib.loads(ran.out)
    (source,) = read["source"]
    assert expected.items() <= source.items()
    assert {tag["name"] for tag in read["tag"]} == tags
    # What is proposed is what the connector takes.
    options = {k: v for k, v in source.items() if k not in {"id", "kind"}}
    connector = connectors.open_source(source["kind"], options, tmp_path)
    begins = pd.Timestamp(first)
    got = connector.read(sorted(tags), Window(begins, begins + pd.Timedelta("30D")))
    assert got.readings["time"].min() == begins
    assert (got.readings["quality"] == 0).all()


def test_units_are_proposed_where_the_export_says_them(lostwork, tmp_path):
    (tmp_path / "export.csv").write_text(WIDE_LOCAL)
    told = lostwork("check", "--sniff", tmp_path / "export.csv", "--json").json()
    assert told["tags"] == {"Dampf [t/h]": "t/h", "Druck Süd": "bar(g)"}
    assert any("set time_zone" in point for point in told["to_settle"])


def test_a_unit_that_a_site_file_does_not_take_is_left_open_with_what_the_export_says(
    lostwork, tmp_path
):
    (tmp_path / "export.csv").write_text(WIDE_LOCAL.replace("bar(g)", "bar"))
    ran = lostwork("check", "--sniff", tmp_path / "export.csv")
    assert 'unit = ""  # the export says "bar"' in ran.out
    assert "# to settle: absolute or gauge: the datum of 'Druck Süd'" in ran.out


def test_a_unit_that_nothing_here_measures_is_named_with_its_tag(lostwork, tmp_path):
    (tmp_path / "export.csv").write_text(WIDE_LOCAL.replace("bar(g)", "pH"))
    ran = lostwork("check", "--sniff", tmp_path / "export.csv")
    assert "# to settle: no unit of a site file: that of 'Druck Süd' (pH);" in ran.out


def test_a_vacuum_gauge_is_taken_for_one(lostwork, tmp_path):
    (tmp_path / "export.csv").write_text(WIDE_LOCAL.replace("bar(g)", "mbar vac"))
    told = lostwork("check", "--sniff", tmp_path / "export.csv", "--json").json()
    assert told["tags"]["Druck Süd"] == "mbar(vac)"


def test_the_proposed_path_is_right_in_a_site_file_where_the_command_was_given(
    lostwork, tmp_path, monkeypatch
):
    (tmp_path / "exports").mkdir()
    (tmp_path / "exports" / "day.csv").write_text(LONG)
    monkeypatch.chdir(tmp_path)
    table = tomllib.loads(lostwork("check", "--sniff", "exports/day.csv").out)["source"][0]
    assert table["path"] == "exports/day.csv"
    options = {key: value for key, value in table.items() if key not in {"id", "kind"}}
    with closing(connectors.open_source("csv", options, tmp_path)) as source:
        assert source.probe().tags == ("62-PT-001", "62-TT-001")


def test_what_the_export_does_not_say_is_left_to_a_person(lostwork, tmp_path):
    (tmp_path / "export.csv").write_text(AMBIGUOUS)
    ran = lostwork("check", "--sniff", tmp_path / "export.csv")
    assert "# to settle: day or month first?" in ran.out
    assert "# to settle: the unit of 'FT-1', for example" in ran.out
    assert 'unit = ""' in ran.out


def test_a_packed_export_is_looked_into(lostwork, tmp_path):
    with gzip.open(tmp_path / "export.csv.gz", "wt") as file:
        file.write(LONG)
    assert lostwork("check", "--sniff", tmp_path / "export.csv.gz").code == 0


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"just a letter\nto somebody\n", "no table"),
        (b"a,b\n1,2\n3,4\n", "no column of times"),
        (b"time,FT-1\n", "no table"),
        (b"", "is empty"),
    ],
)
def test_what_is_no_export_is_told(lostwork, tmp_path, content, said):
    (tmp_path / "export.csv").write_bytes(content)
    ran = lostwork("check", "--sniff", tmp_path / "export.csv")
    assert (ran.code, ran.out) == (2, "")
    assert said in ran.err


def test_an_export_that_is_not_there_is_told(lostwork, tmp_path):
    ran = lostwork("check", "--sniff", tmp_path / "no.csv")
    assert ran.code == 2
    assert "no.csv cannot be read" in ran.err


def test_check_takes_a_site_or_an_export(lostwork, plant):
    for given in ((), (plant.path, "--sniff", plant.path)):
        ran = lostwork("check", *given)
        assert ran.code == 2
        assert "give either a site file, or --sniff EXPORT.csv" in ran.err
