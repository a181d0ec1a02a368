"""What is proposed for an export that nobody has described: tried on every awkward kind."""

from __future__ import annotations

import contextlib
import csv
import io
import os
import sqlite3
import tomllib

import awkward
import pandas as pd
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from connectors import open_source, sniff
from connectors.base import ConnectorError, Window

ALL = Window(pd.Timestamp("2026-01-31", tz="UTC"), pd.Timestamp("2026-02-01", tz="UTC"))

# What no file says, and a person has to: the zone, and what the site's own words and codes mean.
SETTLED = {
    "local time": {"time_zone": awkward.ZONE},
    "spreadsheet days of the 1904 calendar, local time": {
        "time_zone": awkward.ZONE,
        "time_format": "serial_1904",
    },
    "date and time of day apart, twelve hours, local time": {"time_zone": awkward.ZONE},
    "the site's own words for no value": {"bad_words": ["gestört"]},
    "digital states": {"states": {"AUF": 1, "zu": 0}},
    "wide with states and words": {"states": {"on": 1, "off": 0}},
    "quality as ranges of codes": {
        "quality_bad": ["0-63"],
        "quality_uncertain": ["64-99"],
        "quality_good": ["100-199"],
    },
    "parquet with local timestamps": {"time_zone": awkward.ZONE},
    "parquet with times and values as texts": {"bad_words": ["gestört"]},
}


def pasted(found):
    """The proposal as it is pasted: TOML read back."""
    (table,) = tomllib.loads(found.source_table("new"))["source"]
    assert table.pop("id") == "new"
    return table.pop("kind"), table


@pytest.mark.parametrize("name", awkward.KINDS)
def test_the_proposal_for_every_kind_of_export_reads_it(tmp_path, name):
    written = awkward.KINDS[name](tmp_path)
    file = min(path for path in tmp_path.iterdir() if path.is_file())
    found = sniff(file)
    kind, options = pasted(found)
    options |= SETTLED.get(name, {})
    options["path"] = f"*{file.suffix}"  # the other files of the folder too
    source = open_source(kind, options, tmp_path)
    result = source.read(awkward.TAGS, ALL)
    source.close()
    expected = awkward.expected(with_quality=written.with_quality)
    pd.testing.assert_frame_equal(result.readings, expected)
    assert {p.what.split(":")[0] for p in result.problems} == written.problems


def write(folder, text, name="export.csv", encoding="utf-8"):
    path = folder / name
    path.write_bytes(text.encode(encoding))
    return path


def long_rows(count=40, tags=("a", "b"), more=""):
    return "".join(
        f"2026-01-31T06:{n % 60:02d}:00Z,{tag},{n}.5{more}\n" for n in range(count) for tag in tags
    )


def test_units_and_texts_below_the_header_go_into_the_tag_list(tmp_path):
    head = "Export of unit 6\n\nZeit;PT 1;TT, 2;Strom [MW];FT 3\n"
    head += ';Frischdampf;vor "TG1";;\n;bar ü;°C;;t/h\n'
    rows = "".join(f"31.01.2026 06:{n:02d};41,{n};500,5;1,5;12\n" for n in range(30))
    found = sniff(write(tmp_path, head + rows, encoding="cp1252"))
    assert list(csv.DictReader(io.StringIO(found.tag_list("dcs"), newline=""))) == [
        {"name": "FT 3", "source": "dcs", "unit": "t/h", "description": ""},
        {"name": "PT 1", "source": "dcs", "unit": "bar(g)", "description": "Frischdampf"},
        {"name": "Strom [MW]", "source": "dcs", "unit": "MW", "description": ""},
        {"name": "TT, 2", "source": "dcs", "unit": "degC", "description": 'vor "TG1"'},
    ]
    assert pasted(found)[1] == {
        "path": "export.csv",
        "layout": "wide",
        "time_column": "Zeit",
        "time_format": "day_first",
        "encoding": "cp1252",
        "delimiter": ";",
        "skip_lines": 2,
        "rows_after_header": 2,
        "decimal": ",",
    }
    assert found.open_points == (
        "the times have no offset; set time_zone (UTC is taken until then)",
    )


def test_a_column_of_units_beside_the_tags_goes_into_the_tag_list(tmp_path):
    rows = long_rows(tags=("PT-1",), more=",bar") + long_rows(tags=("TT-2",), more=",DEG C")
    found = sniff(write(tmp_path, "time,tag,value,EU\n" + rows))
    assert [(tag.name, tag.unit) for tag in found.tags] == [("PT-1", "bar"), ("TT-2", "degC")]
    assert found.open_points == ("absolute or gauge: the datum of 'PT-1', for example 'bar(g)'",)


def test_what_the_file_does_not_say_is_named(tmp_path):
    rows = "".join(
        f"0{1 + n % 9}.02.2026 06:{n:02d},{word},{q}\n"
        for n, (word, q) in enumerate([("Open", 3), ("1.5", 7), ("2.5", 7)] * 12)
    )
    rows = "".join(f"V-1,{line}\n" for line in rows.splitlines())
    found = sniff(write(tmp_path, "tag,time,value,quality\n" + rows))
    points = "\n".join(found.open_points)
    assert "day or month first? time_format = 'day_first' leaves the smaller gaps" in points
    assert "set time_zone" in points
    assert "quality is written as 3, 7: say in quality_good" in points
    assert "words in the values' place: 'Open' (12): add those" in points
    assert "the unit of 'V-1', for example" in points
    assert "36 × quality word is in no list" in points
    for point in found.open_points:
        assert f"# to settle: {point}" in found.source_table()


def test_days_and_months_that_cannot_be_told_apart_are_a_guess(tmp_path):
    for clock, guess in (("06:00", "day_first"), ("6:00 PM", "month_first")):
        rows = "".join(f"02/03/2026 {clock},{n},x\n" for n in range(30))
        found = sniff(write(tmp_path, "time,FT-1,note\n" + rows))
        assert f"day or month first? time_format = '{guess}' is a guess" in found.open_points


def test_numbers_that_may_be_thousands_are_a_guess(tmp_path):
    rows = "".join(f"2026-01-31T06:{n:02d}Z;1,5{n}\n" for n in range(10, 50))
    found = sniff(write(tmp_path, "time;FT-1\n" + rows))
    assert found.options["decimal"] == ","
    assert "are commas decimal marks, or between thousands?" in found.open_points


def test_only_the_first_part_of_a_large_file_is_judged(tmp_path, monkeypatch):
    monkeypatch.setattr("connectors.sniff_text._HEAD", 2_000)
    text = "time,Ölstand,b\n" + "".join(f"2026-01-31T06:{n:02d}:00Z,ö{n},{n}\n" for n in range(60))
    for cut in range(1_990, 2_010):  # through a character, a line end, a cell
        monkeypatch.setattr("connectors.sniff_text._HEAD", cut)
        found = sniff(write(tmp_path, text.replace("ö", "")))
        assert [tag.name for tag in found.tags] == ["b", "Ölstand"]
        assert "encoding" not in found.options


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "is empty"),
        ("just a letter\nto somebody\n", "no table found"),
        ("a,b\n1,2\n3,4\n", "no column of times"),
        ("2026-01-31 06:00,1\n2026-01-31 06:01,2\n", "no table found"),  # no header
        ("time,FT-1\n", "no table found"),
        ("PAR1 but no more", "no whole Parquet file"),
    ],
)
def test_what_is_no_export_is_told(tmp_path, text, message):
    with pytest.raises(ConnectorError, match=message):
        sniff(write(tmp_path, text))


def test_a_file_that_is_not_there_or_not_whole_is_told(tmp_path):
    with pytest.raises(ConnectorError, match="cannot be read"):
        sniff(tmp_path / "absent.csv")
    with pytest.raises(ConnectorError, match="not a whole zip archive"):
        sniff(write(tmp_path, "PK\x03\x04 and no more", "export.zip"))
    awkward.parquet(tmp_path, pd.DataFrame({"a": [1], "b": ["x"]}))
    with pytest.raises(ConnectorError, match="no column of times"):
        sniff(tmp_path / "export.parquet")


def test_a_database_in_a_file_is_told_from_an_export_without_a_table(tmp_path):
    with contextlib.closing(sqlite3.connect(tmp_path / "history.sqlite")) as database:
        database.execute("create table reading (time text, tag text, value real)")
        database.commit()
    with pytest.raises(ConnectorError, match=r"is a SQLite database.*kind = 'sql'"):
        sniff(tmp_path / "history.sqlite")


def test_flows_of_us_plants_are_known_by_their_short_names(tmp_path):
    text = "time;gas;steam;make-up\n;scfh;kpph;pph\n"
    text += "".join(f"2026-01-31 06:{m:02d};5,5;30,1;900,5\n" for m in range(9))
    found = sniff(write(tmp_path, text))
    listed = csv.DictReader(io.StringIO(found.tag_list("dcs"), newline=""))
    units = {row["name"]: row["unit"] for row in listed}
    assert units == {"gas": "scf/h", "steam": "klb/h", "make-up": "lb/h"}


@pytest.mark.parametrize("name", ["export [1].csv", "a*b?.csv", "tags \"of\" 'x'.csv"])
def test_a_file_may_have_any_name(tmp_path, name):
    if os.name == "nt":
        pytest.skip("such names do not exist there")
    found = sniff(write(tmp_path, "time,tag,value\n" + long_rows(), name))
    assert pasted(found)[1]["path"] == name


HOSTILE = ['"]]\n[store]', "a\nid = 'x'", "\x1b[31m", "\u2028x\x7f", '"""', "</script>", "=cmd()"]


@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@example(names=["\x1b[31m", "0\r0"])
@given(names=st.lists(st.sampled_from(HOSTILE) | st.text(max_size=8), min_size=2, max_size=4))
def test_names_in_a_file_never_become_keys_of_the_proposal(tmp_path_factory, names):
    folder = tmp_path_factory.mktemp("hostile")
    text = io.StringIO()
    writer = csv.writer(text)
    writer.writerow(["time", *names])
    writer.writerows(
        [f"2026-01-31T06:{n:02d}:00Z", *["x" if n else "1.5"] * len(names)] for n in range(30)
    )
    try:
        found = sniff(write(folder, text.getvalue().encode(errors="replace").decode()))
    except ConnectorError:
        return
    table = tomllib.loads(found.source_table())
    assert table.keys() == {"source"}
    assert table["source"] == [{"id": "export", "kind": "csv", **found.options}]
    rows = list(csv.reader(io.StringIO(found.tag_list(), newline="")))
    assert [row[0] for row in rows[1:]] == [tag.name for tag in found.tags]


@settings(
    max_examples=120, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    noise=st.lists(st.binary(max_size=60), max_size=6),
    at=st.integers(0, 200),
    name=st.sampled_from(["x.csv", "x.csv.gz", "x.zip", "x.parquet"]),
)
def test_noise_is_proposed_for_or_refused_but_never_crashes(tmp_path_factory, noise, at, name):
    data = ("time,tag,value\n" + long_rows(5)).encode()
    path = tmp_path_factory.mktemp("noise") / name
    path.write_bytes(data[:at] + b"".join(noise) + data[at:])
    try:
        found = sniff(path)
    except ConnectorError:
        return
    assert tomllib.loads(found.source_table())["source"]
