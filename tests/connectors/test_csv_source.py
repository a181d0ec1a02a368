from __future__ import annotations

import gzip
import itertools
import os
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv as pacsv
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import connectors.csv_index
from connectors import open_source
from connectors.base import READING_COLUMNS, Connector, ConnectorError, Quality, Window
from connectors.csv_options import CsvOptions
from connectors.csv_source import CsvSource

DAY = Window(pd.Timestamp("2026-01-31", tz="UTC"), pd.Timestamp("2026-02-01", tz="UTC"))
LONG = """time,tag,value,quality
2026-01-31 06:00:00,62-PT-001,41.5,Good
2026-01-31 06:00:00,62-FT-002,12.25,Good
2026-01-31 06:01:00,62-PT-001,41.625,Good
2026-01-31 06:01:00,62-FT-002,12.5,Uncertain
"""
TAGS = ("62-PT-001", "62-FT-002")


def window(start, end):
    return Window(pd.Timestamp(start, tz="UTC"), pd.Timestamp(end, tz="UTC"))


def source(folder, path="*.csv", **options) -> Connector:
    return open_source("csv", {"path": path, **options}, folder)


def write(folder, text, name="export.csv", encoding="utf-8"):
    path = folder / name
    path.write_bytes(text.encode(encoding))
    return path


def append(path, text):
    with path.open("ab") as file:
        file.write(text.encode())


def rows(result):
    """Readings as plain tuples, times as 'hh:mm' of UTC (with seconds only where they matter)."""
    table = result.readings
    return [
        (str(tag), f"{t:%H:%M}", None if np.isnan(v) else v, Quality(q).name)
        for tag, t, v, q in table[list(READING_COLUMNS)].itertuples(index=False)
    ]


def counts(result):
    return {problem.what.split(":")[0]: problem.count for problem in result.problems}


EXPECTED = [
    ("62-FT-002", "06:00", 12.25, "GOOD"),
    ("62-FT-002", "06:01", 12.5, "UNCERTAIN"),
    ("62-PT-001", "06:00", 41.5, "GOOD"),
    ("62-PT-001", "06:01", 41.625, "GOOD"),
]


def test_a_clean_long_export_is_read_sorted_by_tag_and_time(tmp_path):
    write(tmp_path, LONG)
    result = source(tmp_path, quality_column="quality").read(TAGS, DAY)
    assert rows(result) == EXPECTED
    assert result.problems == ()
    assert tuple(result.readings.columns) == READING_COLUMNS
    assert list(result.readings["tag"].cat.categories) == sorted(TAGS)
    assert [str(t) for t in result.readings.dtypes[1:]] == [
        "datetime64[us, UTC]",
        "float64",
        "uint8",
    ]


def test_a_clean_wide_export_gives_no_reading_for_an_empty_cell(tmp_path):
    write(
        tmp_path,
        "time,62-PT-001,62-FT-002,other\n"
        "2026-01-31 06:00:00,41.5,12.25,1\n2026-01-31 06:01:00,,Comm Fail,2\n",
    )
    result = source(tmp_path, layout="wide").read(TAGS, DAY)
    assert rows(result) == [
        ("62-FT-002", "06:00", 12.25, "GOOD"),
        ("62-FT-002", "06:01", None, "BAD"),
        ("62-PT-001", "06:00", 41.5, "GOOD"),
    ]
    assert result.problems == ()


def test_a_wide_export_whose_words_come_late_keeps_its_clean_columns(tmp_path, monkeypatch):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", 256)
    lines = [f"2026-01-31 06:{m:02d}:00,{m}.5,{m}" for m in range(60)]
    lines[40] = "2026-01-31 06:40:00,No Data,40"
    write(tmp_path, "\n".join(["time,a,b", *lines, ""]))
    table = source(tmp_path, layout="wide").read(["a", "b"], DAY).readings
    a = table[table["tag"] == "a"]
    assert np.isnan(a["value"].iloc[40])
    assert a["quality"].iloc[40] == Quality.BAD
    assert np.nansum(a["value"]) == sum(m + 0.5 for m in range(60) if m != 40)
    assert table.loc[table["tag"] == "b", "value"].tolist() == list(range(60))


def test_a_window_is_half_open_and_unknown_tags_give_no_rows(tmp_path):
    write(tmp_path, LONG)
    result = source(tmp_path).read(
        [*TAGS, "absent"], window("2026-01-31 06:00", "2026-01-31 06:01")
    )
    assert [(tag, t) for tag, t, _, _ in rows(result)] == [
        ("62-FT-002", "06:00"),
        ("62-PT-001", "06:00"),
    ]


@pytest.mark.parametrize(
    ("text", "encoding", "options"),
    [
        (LONG, "utf-8-sig", {}),
        (LONG, "utf-16", {"encoding": "utf-16"}),
        (LONG, "utf-16-be", {"encoding": "utf-16-be"}),
        (LONG.replace("\n", "\r\n"), "utf-8", {}),
        (LONG.replace(".", ",").replace("0,", "0;").replace(",6", ";6"), "utf-8", None),
        ("Plant export\nby, shift, two\n" + LONG, "utf-8", {"skip_lines": 2}),
        (LONG.replace("quality\n", "quality\n,,bar(g),\n"), "utf-8", {"rows_after_header": 1}),
        ("# made by hand\n" + LONG.replace("2026-01-31 06:01:00,62-PT", "# a,b,c,d\n\n"
         "2026-01-31 06:01:00,62-PT"), "utf-8", {"comment": "#"}),
        (LONG.replace("2026-01-31 06:00:00,62-PT-001", '"2026-01-31 06:00:00"," 62-PT-001 "'),
         "utf-8", {}),
        (LONG.replace(" 06", "T06").replace(":00,", ":00.0000000Z,"), "utf-8", {}),
        (LONG.replace("2026-01-31 06", "2026-01-31 07").replace(":00,", ":00+01:00,"),
         "utf-8", {}),
        (LONG.replace("2026-01-31", "31.01.2026"), "utf-8", {"time_format": "%d.%m.%Y %H:%M:%S"}),
        (LONG.replace("2026-01-31 06:00:00", "1769839200").replace("2026-01-31 06:01:00",
         "1769839260.0"), "utf-8", {"time_format": "epoch_s"}),
        (LONG.replace("2026-01-31 06:00:00", "1769839200000").replace("2026-01-31 06:01:00",
         "1769839260000"), "utf-8", {"time_format": "epoch_ms"}),
        (LONG.replace("Good", "192").replace("Uncertain", "64"), "utf-8", {}),
        (LONG.replace("Good", "gOOD "), "utf-8", {}),
        (LONG.replace("Good", "in order"), "utf-8", {"quality_good": ["In Order"]}),
    ],
    ids=["utf-8 mark", "utf-16 mark", "utf-16 big end", "crlf", "decimal comma", "junk lines",
         "units row", "comments", "quoted", "seven decimals", "offset", "day first", "epoch s",
         "epoch ms", "quality numbers", "quality case", "own quality words"],
)  # fmt: skip
def test_the_same_readings_in_many_dresses(tmp_path, text, encoding, options):
    if options is None:  # decimal comma with semicolons, built in the open
        text = LONG.replace(",", ";").replace(".", ",")
        options = {"delimiter": ";", "decimal": ","}
    write(tmp_path, text, encoding=encoding)
    result = source(tmp_path, quality_column="quality", **options).read(TAGS, DAY)
    assert rows(result) == EXPECTED
    assert result.problems == ()


def test_a_cp1252_export_keeps_its_umlauts_and_signs(tmp_path):
    write(tmp_path, "Zeit;Größe;Wert\n31.01.2026 06:00;Druck °1;4,5\n", encoding="cp1252")
    result = source(
        tmp_path,
        encoding="cp1252",
        delimiter=";",
        decimal=",",
        time_format="%d.%m.%Y %H:%M",
        time_column="Zeit",
        tag_column="Größe",
        value_column="Wert",
    ).read(["Druck °1"], DAY)
    assert rows(result) == [("Druck °1", "06:00", 4.5, "GOOD")]


def test_bytes_that_are_not_utf8_are_counted_and_cost_only_their_own_cell(tmp_path):
    path = write(tmp_path, LONG)
    append(path, "2026-01-31 06:02:00,62-PT-001,1.5,Good\n")
    path.write_bytes(path.read_bytes() + b"2026-01-31 06:03:00,62-\xb0-003,1.5,Good\n")
    result = source(tmp_path).read(TAGS, DAY)
    assert len(result.readings) == 5
    assert list(counts(result).values()) == [1]


@pytest.mark.parametrize("thousands", [".", " ", "'"])
def test_thousands_marks_are_taken_out_only_between_groups_of_three(tmp_path, thousands):
    text = "time;tag;value\n2026-01-31 06:00;a;1.234,5\n2026-01-31 06:01;a;12.34\n"
    write(tmp_path, text.replace(".", thousands))
    result = source(tmp_path, delimiter=";", decimal=",", thousands=thousands).read(["a"], DAY)
    assert rows(result) == [("a", "06:00", 1234.5, "GOOD"), ("a", "06:01", None, "BAD")]
    assert counts(result) == {"value is not a number": 1}


def test_a_packed_export_is_unpacked(tmp_path):
    (tmp_path / "export.csv.gz").write_bytes(gzip.compress(LONG.encode()))
    result = source(tmp_path, "*.gz", quality_column="quality").read(TAGS, DAY)
    assert rows(result) == EXPECTED


def test_a_packed_export_that_ends_early_gives_what_stands_before_and_says_so(tmp_path):
    lines = "".join(f"2026-01-31 06:00:{n % 60:02d}.{n:06d},a,{n}\n" for n in range(50_000))
    packed = gzip.compress(f"time,tag,value\n{lines}".encode())
    (tmp_path / "export.csv.gz").write_bytes(packed[: len(packed) // 2])
    result = source(tmp_path, "*.gz").read(["a"], DAY)
    assert 0 < len(result.readings) < 50_000
    assert "packed file ends early or is damaged" in counts(result)


def test_words_in_value_cells_are_bad_and_only_unknown_ones_are_counted(tmp_path):
    write(
        tmp_path,
        "time,tag,value\n"
        "2026-01-31 06:00,a,Bad\n2026-01-31 06:01,a,comm FAIL\n2026-01-31 06:02,a,\n"
        "2026-01-31 06:03,a,4.5\n2026-01-31 06:04,a,gestört\n2026-01-31 06:05,a,1e3\n",
    )
    result = source(tmp_path).read(["a"], DAY)
    assert [(v, q) for _, _, v, q in rows(result)] == [
        (None, "BAD"),
        (None, "BAD"),
        (None, "BAD"),
        (4.5, "GOOD"),
        (None, "BAD"),
        (1000.0, "GOOD"),
    ]
    (problem,) = result.problems
    assert problem.count == 1
    assert problem.where == "export.csv:line 6"
    assert str(problem).endswith("(first: line 6 'gestört')")


def test_an_unknown_quality_word_is_uncertain_and_counted(tmp_path):
    write(tmp_path, LONG.replace("Good", "0"))
    result = source(tmp_path, quality_column="quality").read(TAGS, DAY)
    assert {q for *_, q in rows(result)} == {"UNCERTAIN"}
    assert counts(result) == {"quality word is in no list": 3}


def test_bad_rows_are_counted_with_the_place_of_the_first_and_reported_once(tmp_path):
    write(
        tmp_path,
        LONG + "yesterday,62-PT-001,1,Good\n2026-01-31 07:00:00,62-PT-001\n"
        "2026-01-31 07:01:00,,3,Good\n2026-01-31 07:02:00,62-PT-001,1,5,Good\n"
        "2026-13-31 07:00:00,62-PT-001,1,Good\n",
    )
    reader = source(tmp_path)
    result = reader.read(TAGS, DAY)
    assert len(result.readings) == 4
    assert {(p.where, str(p), p.count) for p in result.problems} == {
        (
            "export.csv:line 7",
            (
                "row dropped: more or fewer cells than the header"
                " (first: line 7 '2026-01-31 07:00:00,62-PT-001',"
                " line 9 '2026-01-31 07:02:00,62-PT-001,1,5,Good')"
            ),
            2,
        ),
        (
            "export.csv:line 6",
            (
                "row dropped: its time cannot be read"
                " (first: line 6 'yesterday', line 10 '2026-13-31 07:00:00')"
            ),
            2,
        ),
        ("export.csv:line 8", "row dropped: it names no tag (first: line 8)", 1),
    }
    # Every row of the file is either a reading or counted with its reason.
    assert len(result.readings) + sum(p.count for p in result.problems) == 9
    assert reader.read(TAGS, DAY).problems == ()


@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    body=st.lists(
        st.sampled_from(["good", "short", "no time", "word", "", "# remark"]), max_size=25
    ),
    block=st.sampled_from([80, 300, 10_000]),
)
def test_every_example_names_the_line_that_it_stands_on(tmp_path, monkeypatch, body, block):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", block)
    lines = ["time,tag,value,quality"]
    for at, word in enumerate(body):
        time = f"2026-01-31 06:{at:02}:00"
        lines.append(
            {
                "good": f"{time},62-PT-001,1.5,Good",
                "short": f"{time},62-PT-001",
                "no time": f"never {at},62-PT-001,1.5,Good",
                "word": f"{time},62-PT-001,about {at},Good",
            }.get(word, word)
        )
    write(tmp_path, "\n".join(lines) + "\n")
    problems = source(tmp_path, comment="#").read(TAGS, DAY).problems
    assert sum(p.count for p in problems) == sum(w in {"short", "no time", "word"} for w in body)
    for problem in problems:
        for example in problem.examples:
            assert example.text in lines[int(example.place.removeprefix("line ")) - 1]
            assert example.text


def test_of_a_problem_the_first_few_are_kept_over_all_blocks(tmp_path, monkeypatch):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", 100)
    write(tmp_path, LONG + "".join(f"never {n},62-PT-001,{n},Good\n" for n in range(40)))
    (problem,) = source(tmp_path).read(TAGS, DAY).problems
    assert problem.count == 40
    assert [(e.place, e.text) for e in problem.examples] == [
        ("line 6", "never 0"),
        ("line 7", "never 1"),
        ("line 8", "never 2"),
    ]


def test_a_decimal_comma_that_the_site_file_does_not_know_of_is_called_by_its_name(tmp_path):
    write(tmp_path, LONG.replace(",", ";").replace(".", ","))
    result = source(tmp_path, delimiter=";").read(TAGS, DAY)
    (problem,) = result.problems
    assert problem.what == (
        "value has a decimal comma: the reading is kept as bad; set decimal = ','"
    )
    assert problem.examples[0].text == "41,5"


def test_a_stray_quotation_mark_does_not_swallow_the_rows_after_it(tmp_path):
    write(
        tmp_path,
        LONG + '2026-01-31 06:02:00,62-PT-001,"3,Good\n2026-01-31 06:03:00,62-PT-001,4,Good\n'
        '2026-01-31 06:04:00,62-PT-001,"5",Good\n',
    )
    result = source(tmp_path).read(["62-PT-001"], DAY)
    assert [v for _, _, v, _ in rows(result)] == [41.5, 41.625, 3, 4, 5]
    assert "block with a quotation mark that is not closed" in counts(result)


def test_rows_out_of_order_come_out_in_order(tmp_path):
    head, *body = LONG.splitlines()
    write(tmp_path, "\n".join([head, *reversed(body), ""]))
    assert rows(source(tmp_path, quality_column="quality").read(TAGS, DAY)) == EXPECTED


def test_of_readings_given_twice_the_last_one_written_counts(tmp_path):
    write(tmp_path, LONG, "export 9.csv")
    write(tmp_path, "time,tag,value\n2026-01-31 06:00,62-PT-001,99\n", "export 10.csv")
    result = source(tmp_path).read(["62-PT-001"], DAY)
    assert [v for _, _, v, _ in rows(result)] == [99, 41.625]
    assert counts(result) == {"reading given again for the same tag and time": 1}


def test_files_of_one_source_may_have_their_columns_in_another_order(tmp_path):
    write(tmp_path, "time,tag,value\n2026-01-31 06:00,a,1\n", "1.csv")
    write(tmp_path, "value,comment,tag,time\n2,x,a,2026-01-31 06:01\n", "2.csv")
    assert [v for _, _, v, _ in rows(source(tmp_path).read(["a"], DAY))] == [1, 2]


# A growing, replaced, half-written file ---------------------------------------------------------


def test_a_half_written_last_line_waits_for_the_rest_of_it(tmp_path):
    path = write(tmp_path, LONG + "2026-01-31 06:02:00,62-PT-001,4")
    reader = source(tmp_path)
    assert len(reader.read(TAGS, DAY).readings) == 4
    append(path, "3.5,Good\n")
    result = reader.read(["62-PT-001"], DAY)
    assert [v for _, _, v, _ in rows(result)] == [41.5, 41.625, 43.5]
    assert result.problems == ()


def test_a_last_line_without_an_end_is_read_once_the_file_has_been_left_alone(tmp_path):
    path = write(tmp_path, LONG + "2026-01-31 06:02:00,62-PT-001,4")
    reader = source(tmp_path)
    assert len(reader.read(TAGS, DAY).readings) == 4
    old = time.time() - 3600
    os.utime(path, (old, old))
    result = reader.read(TAGS, DAY)
    assert len(result.readings) == 4  # two cells too few: counted, not read
    append(path, "3.5,Good\n")
    assert [v for _, _, v, _ in rows(reader.read(["62-PT-001"], DAY))] == [41.5, 41.625, 43.5]
    write(tmp_path, LONG.rstrip("\n"))
    os.utime(path, (old, old))
    assert rows(source(tmp_path, quality_column="quality").read(TAGS, DAY)) == EXPECTED


def test_a_file_that_grew_is_read_only_from_its_old_end(tmp_path, monkeypatch):
    path = write(tmp_path, LONG)
    reader = source(tmp_path, quality_column="quality")
    reader.read(TAGS, DAY)
    parsed = []
    original = connectors.csv_index.BlockParser.parse

    def spy(self, raw, line, problems, order=None):
        parsed.append((raw, line))
        return original(self, raw, line, problems, order)

    monkeypatch.setattr(connectors.csv_index.BlockParser, "parse", spy)
    append(path, "2026-01-31 06:02:00,62-PT-001,43,Good\n")
    assert len(reader.read(TAGS, DAY).readings) == 5
    assert parsed == [(b"2026-01-31 06:02:00,62-PT-001,43,Good\n", 6)]
    assert len(reader.read(TAGS, DAY).readings) == 5
    assert len(parsed) == 1


def test_many_small_additions_end_up_in_one_block(tmp_path):
    path = write(tmp_path, LONG)
    reader = source(tmp_path)
    for second in range(30):
        append(path, f"2026-01-31 06:02:{second:02d},62-PT-001,{second},Good\n")
        reader.read(TAGS, DAY)
    (file,) = reader._files.values()
    assert len(file.blocks) == 1
    assert len(reader.read(TAGS, DAY).readings) == 34


@pytest.mark.parametrize("how", ["renamed over", "rewritten longer", "rewritten shorter", "edited"])
def test_a_replaced_file_is_indexed_anew(tmp_path, how):
    path = write(tmp_path, LONG)
    reader = source(tmp_path)
    reader.read(TAGS, DAY)
    lines = {"rewritten longer": 8, "rewritten shorter": 2}.get(how, 4)
    new = "time,tag,value,quality\n" + "".join(
        f"2026-01-31 07:{m:02d}:00,62-PT-001,1{m}.5,Good\n" for m in range(lines)
    )
    if how == "edited":
        new = LONG.replace("41.5", "77.5")
    target = write(tmp_path, new, "new.tmp") if how == "renamed over" else None
    if target is None:
        path.write_text(new)
        os.utime(path, ns=(1, 1))
    else:
        target.replace(path)
    values = [v for _, _, v, _ in rows(reader.read(["62-PT-001"], DAY))]
    assert values == ([77.5, 41.625] if how == "edited" else [10.5 + m for m in range(lines)])


def test_a_file_taken_away_takes_its_readings_with_it(tmp_path):
    write(tmp_path, LONG, "1.csv")
    path = write(tmp_path, LONG.replace("06:", "07:"), "2.csv")
    reader = source(tmp_path)
    assert len(reader.read(TAGS, DAY).readings) == 8
    path.unlink()
    assert len(reader.read(TAGS, DAY).readings) == 4


def test_tags_asked_for_later_are_found_in_files_already_indexed(tmp_path):
    write(tmp_path, LONG)
    reader = source(tmp_path)
    assert len(reader.read(["62-PT-001"], DAY).readings) == 2
    assert len(reader.read(TAGS, DAY).readings) == 4
    assert len(reader.read(["62-FT-002"], DAY).readings) == 2


@pytest.mark.parametrize("packed", [False, True])
def test_a_cache_too_small_for_the_files_changes_nothing(tmp_path, monkeypatch, packed):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", 512)
    lines = "".join(
        f"2026-01-31 {m // 60:02d}:{m % 60:02d}:00,{tag},{m},Good\n"
        for m in range(600)
        for tag in TAGS
    )
    path = write(tmp_path, "time,tag,value,quality\n" + lines)
    if packed:
        (tmp_path / "small.csv.gz").write_bytes(gzip.compress(path.read_bytes()))
    name = "small.csv.gz" if packed else "*.csv"
    small = CsvSource(CsvOptions(path=name), tmp_path, cache_limit=2_000)
    large = CsvSource(CsvOptions(path="*.csv"), tmp_path)
    for hour in range(10):
        part = window(f"2026-01-31 {hour:02d}:00", f"2026-01-31 {hour + 1:02d}:00")
        one, other = small.read(TAGS, part).readings, large.read(TAGS, part).readings
        pd.testing.assert_frame_equal(one, other)
        assert len(one) == 120
        assert small._cache.used <= 2_000


# Nothing to read, or the wrong thing ------------------------------------------------------------


@pytest.mark.parametrize("text", ["", "time,tag,value\n", "time,tag", "\n\n"])
def test_an_empty_file_gives_an_empty_table(tmp_path, text):
    write(tmp_path, text)
    result = source(tmp_path).read(TAGS, DAY)
    assert len(result.readings) == 0
    assert list(result.readings["tag"].cat.categories) == sorted(TAGS)
    assert str(result.readings["time"].dtype) == "datetime64[us, UTC]"
    probe = source(tmp_path).probe()
    assert (probe.tags, probe.first, probe.last) == ((), None, None)


def test_a_missing_file_is_named_with_what_to_do(tmp_path):
    reader = source(tmp_path, "exports/*.csv")
    for ask in (reader.probe, lambda: reader.read(TAGS, DAY)):
        with pytest.raises(ConnectorError, match=r"no file matches .*exports.*correct the source"):
            ask()


def test_a_header_without_the_column_names_those_found_and_the_nearest(tmp_path):
    write(tmp_path, "Timestamp,tagname,Value\n2026-01-31 06:00,a,1\n")
    with pytest.raises(ConnectorError) as caught:
        source(tmp_path, time_column="timestamp", tag_column="tagname").read(["a"], DAY)
    message = str(caught.value)
    assert "export.csv has no column 'timestamp' (time_column)" in message
    assert "nearest is 'Timestamp'" in message
    assert "'Timestamp', 'tagname', 'Value'" in message


def test_one_foreign_file_among_many_is_passed_over_and_counted(tmp_path):
    write(tmp_path, LONG, "1.csv")
    write(tmp_path, "name,address\nx,y\n", "2.csv")
    reader = source(tmp_path)
    result = reader.read(TAGS, DAY)
    assert len(result.readings) == 4
    assert counts(result) == {"file passed over": 1}
    assert reader.read(TAGS, DAY).problems == ()
    assert "file passed over" in counts(source(tmp_path).probe())


def test_a_utf16_export_read_as_utf8_says_which_key_to_set(tmp_path):
    write(tmp_path, LONG, encoding="utf-16")
    with pytest.raises(ConnectorError, match="set encoding = 'utf-16'"):
        source(tmp_path).read(TAGS, DAY)


def test_a_column_that_occurs_twice_is_refused(tmp_path):
    write(tmp_path, "time,tag,value,value\n")
    with pytest.raises(ConnectorError, match=r"'value' \(value_column\) occurs 2 times"):
        source(tmp_path).read(TAGS, DAY)


def test_a_probe_tells_tags_and_span(tmp_path):
    write(tmp_path, LONG)
    write(tmp_path, "time,tag,value\n2026-02-01 06:00,late,1\n", "z.csv")
    probe = source(tmp_path).probe()
    assert probe.tags == ("62-FT-002", "62-PT-001", "late")
    assert probe.first == pd.Timestamp("2026-01-31 06:00", tz="UTC")
    assert probe.last == pd.Timestamp("2026-02-01 06:00", tz="UTC")
    assert probe.detail.startswith("2 files, ")


def test_a_probe_of_long_files_looks_at_both_ends(tmp_path, monkeypatch):
    monkeypatch.setattr("connectors.csv_probe._WHOLE", 1_000)
    monkeypatch.setattr("connectors.csv_probe._END", 200)
    body = "".join(f"2026-01-31 06:{m:02d}:00,a,{m}\n" for m in range(60))
    text = f"time,tag,value\n{body}"
    write(tmp_path, text)
    (tmp_path / "export.csv.gz").write_bytes(gzip.compress(text.encode()) + bytes(0))
    for pattern in ("*.csv", "*.gz"):
        monkeypatch.setattr("connectors.csv_probe._WHOLE", 10)
        probe = source(tmp_path, pattern).probe()
        assert (f"{probe.first:%H:%M}", f"{probe.last:%H:%M}") == ("06:00", "06:59")
        assert "newest" in probe.detail


def test_a_probe_of_a_wide_export_lists_its_headers(tmp_path):
    write(tmp_path, "time,b,a,\n2026-01-31 06:00,1,,\n")
    assert source(tmp_path, layout="wide").probe().tags == ("a", "b")


def test_a_folder_and_a_file_may_have_brackets_in_their_names(tmp_path):
    folder = tmp_path / "unit [1]"
    folder.mkdir()
    write(folder, LONG, "a[1].csv")
    for path in ("*.csv", "a[1].csv", str(folder / "a[1].csv")):
        assert len(source(folder, path).read(TAGS, DAY).readings) == 4


def test_a_home_that_is_not_there_is_told(tmp_path):
    with pytest.raises(ConnectorError, match="nobody-of-this-name"):
        source(tmp_path, "~nobody-of-this-name/*.csv").probe()


def test_a_wide_header_with_a_tag_twice_is_counted_and_the_last_is_read(tmp_path):
    write(tmp_path, "time,a,a\n2026-01-31 06:00,1,2\n")
    result = source(tmp_path, layout="wide").read(["a"], DAY)
    assert rows(result) == [("a", "06:00", 2, "GOOD")]
    assert counts(result) == {"column that occurs more than once in the header": 1}


def test_characters_that_cp1252_does_not_have_are_counted(tmp_path):
    (tmp_path / "export.csv").write_bytes(b"time,tag,value\n2026-01-31 06:00,a\x81,1\n")
    result = source(tmp_path, encoding="cp1252").read(["a\ufffd"], DAY)
    assert rows(result) == [("a\ufffd", "06:00", 1, "GOOD")]
    assert counts(result) == {"characters that the encoding does not have, replaced": 1}


def test_a_parser_that_fails_among_threads_is_asked_again_without(tmp_path, monkeypatch):
    write(tmp_path, LONG + "2026-01-31 06:02:00,62-PT-001\n")
    original, asked = pacsv.read_csv, []

    def fail_among_threads(data, *, read_options, parse_options, convert_options):
        asked.append(read_options.use_threads)
        found = original(data, read_options, parse_options, convert_options)
        if read_options.use_threads:
            raise pa.ArrowException("Unknown error: a chunk failed converting")
        return found

    monkeypatch.setattr(pacsv, "read_csv", fail_among_threads)
    result = source(tmp_path, quality_column="quality").read(TAGS, DAY)
    assert rows(result) == EXPECTED
    assert counts(result) == {"row dropped": 1}
    assert asked == [True, False, False]  # the last one tells which row was refused


def test_a_header_that_is_no_csv_is_cut_all_the_same(tmp_path):
    write(tmp_path, "time,ta\rg,value\n2026-01-31 06:00,a,1\n")
    reader = source(tmp_path, tag_column="ta\rg")
    assert rows(reader.read(["a"], DAY)) == [("a", "06:00", 1, "GOOD")]
    write(tmp_path, f"time,tag,value,{'x' * 200_000}\n2026-01-31 06:00,a,1,\n")
    assert rows(source(tmp_path).read(["a"], DAY)) == [("a", "06:00", 1, "GOOD")]


def test_a_file_that_may_not_be_read_is_told(tmp_path, monkeypatch):
    write(tmp_path, LONG)

    def refuse(path):
        raise PermissionError(13, "Permission denied", str(path))

    monkeypatch.setattr(connectors.csv_index, "open_export", refuse)
    with pytest.raises(ConnectorError, match=r"export\.csv cannot be read \(Permission denied\)"):
        source(tmp_path).read(TAGS, DAY)


def test_a_file_taken_away_between_listing_and_opening_is_as_if_not_listed(tmp_path, monkeypatch):
    write(tmp_path, LONG, "1.csv")
    write(tmp_path, LONG.replace("06:", "07:"), "2.csv")
    original = connectors.csv_index.open_export

    def take_away(path):
        if path.name == "2.csv":
            path.path.unlink()
        return original(path)

    monkeypatch.setattr(connectors.csv_index, "open_export", take_away)
    result = source(tmp_path).read(TAGS, DAY)
    assert len(result.readings) == 4
    assert result.problems == ()


def test_a_file_that_fails_while_an_old_block_is_read_again_is_told(tmp_path, monkeypatch):
    write(tmp_path, LONG)
    reader = CsvSource(CsvOptions(path="*.csv"), tmp_path, cache_limit=0)
    original = connectors.csv_index.open_export
    opened = []

    def fail_at_the_second(path):
        opened.append(path)
        if len(opened) == 2:
            raise OSError(5, "Input/output error")
        return original(path)

    monkeypatch.setattr(connectors.csv_index, "open_export", fail_at_the_second)
    with pytest.raises(ConnectorError, match=r"export\.csv cannot be read \(Input/output error\)"):
        reader.read(TAGS, DAY)
    assert len(reader.read(TAGS, DAY).readings) == 4


@settings(
    max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    noise=st.lists(
        st.one_of(
            st.binary(max_size=30),
            st.sampled_from([b'"', b",", b"\n", b"\r", b"\x00", b"2026-01-31 06:00", b"62-PT-001"]),
        ),
        max_size=12,
    ),
    encoding=st.sampled_from(["utf-8", "cp1252"]),
)
def test_noise_in_a_file_never_stops_the_reader(tmp_path_factory, noise, encoding):
    folder = tmp_path_factory.mktemp("noise")
    tail = b"\n2026-01-31 07:00:00,62-PT-001,5,Good\n"
    (folder / "export.csv").write_bytes(LONG.encode() + b"".join(noise) + tail)
    result = source(folder, encoding=encoding).read(TAGS, DAY)
    assert set(rows(result)) >= {(*row[:3], "GOOD") for row in EXPECTED}


# A law: how rows are cut into files, blocks and pieces does not matter --------------------------

_READING = st.tuples(
    st.integers(0, 40), st.sampled_from(["a", "b", "c"]), st.sampled_from(["1.5", "-2", "Bad", "x"])
)


@settings(
    max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    readings=st.lists(_READING, max_size=40),
    cuts=st.lists(st.integers(0, 40), max_size=3),
    pieces=st.lists(st.integers(0, 1500), max_size=4),
    block=st.sampled_from([40, 100, 4 << 20]),
)
def test_any_split_of_the_same_rows_gives_the_same_readings(
    tmp_path_factory, monkeypatch, readings, cuts, pieces, block
):
    folder = tmp_path_factory.mktemp("split")
    header = "time,tag,value\n"
    lines = [f"2026-01-31 06:{m:02d}:00,{tag},{value}\n" for m, tag, value in readings]
    whole = CsvSource(CsvOptions(path="whole.csv"), folder)
    write(folder, header + "".join(lines), "whole.csv")
    expected = whole.read(["a", "b"], DAY)

    bounds = sorted({0, len(lines), *(min(cut, len(lines)) for cut in cuts)})
    parts = [lines[low:high] for low, high in itertools.pairwise(bounds)] or [[]]
    monkeypatch.setattr(connectors.csv_index, "BLOCK", block)
    grown = CsvSource(CsvOptions(path="part*.csv"), folder)
    problems = 0
    for number, part in enumerate(parts):
        data = (header + "".join(part)).encode()
        steps = sorted({0, len(data), *(min(piece, len(data)) for piece in pieces)})
        path = Path(folder / f"part{number}.csv")
        path.touch()
        for low, high in itertools.pairwise(steps):
            with path.open("ab") as file:
                file.write(data[low:high])
            result = grown.read(["a", "b"], DAY)
            problems += counts(result).get("value is not a number", 0)
    found, sought = grown.read(["a", "b"], DAY).readings, expected.readings
    if len(parts) > 1:  # what stands after later rows is a matter of one file
        found, sought = (table.drop(columns="marks", errors="ignore") for table in (found, sought))
    pd.testing.assert_frame_equal(found, sought)
    assert problems == counts(expected).get("value is not a number", 0)
