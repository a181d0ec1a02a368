"""The same readings as thirty and more plants would export them: each kind by its name.

Every kind is a function from a folder to how a site file would describe what it wrote there.
"""

from __future__ import annotations

import gzip
import os
import zipfile
from dataclasses import dataclass, field

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from connectors.base import Quality

ZONE = "Europe/Vienna"
TAGS = ("62-PT-001", "Füllstand Kessel 1 °", "HV 7, Stellung")
START = pd.Timestamp("2026-01-31 05:58:30.5", tz="UTC")  # half seconds: every format must keep them
G, U, B = Quality.GOOD, Quality.UNCERTAIN, Quality.BAD


def _readings():
    rows = []
    for minute in range(40):
        time = START + pd.Timedelta(minutes=minute)
        rows.append((time, TAGS[0], 1041.5 + minute / 8, U if minute % 9 == 4 else G))
        level = None if minute in {7, 8, 31} else -3.25 + minute / 4
        rows.append((time, TAGS[1], level, B if level is None else G))
        if minute % 5 == 0:
            rows.append((time, TAGS[2], float(minute % 2), G))
    return rows


READINGS = _readings()


def expected(*, with_quality=True):
    """The readings as a tidy table, made without any connector."""
    frame = pd.DataFrame(READINGS, columns=["tag_time", "tag", "value", "quality"])
    table = pd.DataFrame(
        {
            "tag": pd.Categorical(frame["tag"], categories=sorted(TAGS)),
            "time": frame["tag_time"].dt.as_unit("us"),
            "value": frame["value"].astype("float64"),
            "quality": frame["quality"].astype("uint8"),
        }
    )
    if not with_quality:
        table.loc[table["quality"] == U, "quality"] = G
    return table.sort_values(["tag", "time"]).reset_index(drop=True)


@dataclass
class Written:
    """How a site file would describe an export."""

    options: dict
    kind: str = "csv"
    with_quality: bool = True
    problems: frozenset = field(default_factory=frozenset)


KINDS = {}


def kind(name):
    def register(function):
        KINDS[name] = function
        return function

    return register


# The pieces that the kinds are put together from ------------------------------------------------

LONG = {"quality_column": "quality"}
WORDS = {G: "Good", U: "Uncertain", B: "Bad"}


def iso(time):
    return time.strftime("%Y-%m-%d %H:%M:%S.%f")


def number(value):
    return "No Data" if value is None else repr(value)


def cell(text, delimiter=","):
    return f'"{text}"' if delimiter in text else text


def lines(time=iso, value=number, quality=WORDS.get, delimiter=",", rows=READINGS):
    return [
        delimiter.join(cell(text, delimiter) for text in (time(t), tag, value(v), str(quality(q))))
        for t, tag, v, q in rows
    ]


def header(delimiter=",", names=("time", "tag", "value", "quality")):
    return delimiter.join(names)


def put(folder, text, name="export.csv", encoding="utf-8", newline="\n"):
    text = text if isinstance(text, str) else "\n".join([*text, ""])
    path = folder / name
    path.write_bytes(text.replace("\n", newline).encode(encoding))
    return path


def long(folder, **pieces):
    delimiter = pieces.get("delimiter", ",")
    return put(folder, [header(delimiter), *lines(**pieces)])


def comma(value):
    return number(value).replace(".", ",")


def local(pattern):
    return lambda time: time.tz_convert(ZONE).strftime(pattern)


def tenths(pattern):
    """Half seconds as one decimal, which strftime cannot write."""
    return lambda time: time.strftime(pattern).replace("#", str(time.microsecond // 100_000))


def wide_rows(time=iso, value=number):
    table = {}
    for moment, tag, reading, _ in READINGS:
        table.setdefault(moment, {})[tag] = value(reading)
    return [[time(m), *(cells.get(tag, "") for tag in TAGS)] for m, cells in table.items()]


def wide(folder, delimiter=",", after=(), before=(), names=("Zeit", *TAGS), **pieces):
    rows = [names, *after, *wide_rows(**pieces)]
    text = [delimiter.join(cell(text, delimiter) for text in row) for row in rows]
    put(folder, [*before, *text])
    return {"layout": "wide", "time_column": names[0]}


# Dress of the text ------------------------------------------------------------------------------


@kind("clean")
def _(folder):
    long(folder)
    return Written(LONG)


@kind("semicolons and decimal commas")
def _(folder):
    long(folder, delimiter=";", value=comma)
    return Written({**LONG, "delimiter": ";", "decimal": ","})


@kind("tabulators")
def _(folder):
    long(folder, delimiter="\t")
    return Written({**LONG, "delimiter": "tab"})


@kind("bars")
def _(folder):
    long(folder, delimiter="|")
    return Written({**LONG, "delimiter": "|"})


@kind("thousands marks")
def _(folder):
    def grouped(value):
        return number(value) if value is None else f"{value:,}".translate({44: ".", 46: ","})

    long(folder, delimiter=";", value=grouped)
    return Written({**LONG, "delimiter": ";", "decimal": ",", "thousands": "."})


@kind("thousands as narrow blanks")
def _(folder):
    def grouped(value):
        return number(value) if value is None else f"{value:,}".replace(",", "\u202f")

    long(folder, delimiter=";", value=grouped)
    return Written({**LONG, "delimiter": ";", "thousands": "space"})


@kind("byte order mark")
def _(folder):
    put(folder, [header(), *lines()], encoding="utf-8-sig")
    return Written(LONG)


@kind("UTF-16, little end first")
def _(folder):
    put(folder, [header(), *lines()], encoding="utf-16")
    return Written({**LONG, "encoding": "utf-16"})


@kind("UTF-16, big end first, without a mark")
def _(folder):
    put(folder, [header(), *lines()], encoding="utf-16-be")
    return Written({**LONG, "encoding": "utf-16-be"})


@kind("Windows-1252")
def _(folder):
    put(folder, [header(), *lines()], encoding="cp1252")
    return Written({**LONG, "encoding": "cp1252"})


@kind("carriage returns")
def _(folder):
    put(folder, [header(), *lines()], newline="\r\n")
    return Written(LONG)


@kind("every cell quoted, a text with commas and quotes beside")
def _(folder):
    rows = [
        ",".join(f'"{x}"' for x in ('a, b; ""c""', iso(t), tag, number(v), WORDS[q]))
        for t, tag, v, q in READINGS
    ]
    put(folder, ['"note","time","tag","value","quality"', *rows])
    return Written(LONG)


@kind("junk before the header")
def _(folder):
    put(folder, ["Export of shift 2", "", "made,by,hand", header(), *lines()])
    return Written({**LONG, "skip_lines": 3})


@kind("a row of units after the header")
def _(folder):
    put(folder, [header(), ",,bar(g),", *lines()])
    return Written({**LONG, "rows_after_header": 1})


@kind("descriptions and units in the middle of junk")
def _(folder):
    junk = ["Report 7", "", header(), "-----", "", "when,what,how much,how sure", ",,bar,", ""]
    put(folder, [*junk, *lines()])
    return Written({**LONG, "skip_lines": 2, "rows_after_header": 3})


@kind("comments anywhere")
def _(folder):
    body = lines()
    put(folder, ["# plant 7", header(), *body[:9], "# shift change, 1, 2", *body[9:], "# end"])
    return Written({**LONG, "comment": "#"})


@kind("blank lines and a total at the end")
def _(folder):
    body = lines()
    put(folder, [header(), *body[:5], "", "", *body[5:], "", "88 rows"])
    return Written(LONG, problems=frozenset({"row dropped"}))


@kind("the last line without an end")
def _(folder):
    path = put(folder, "\n".join([header(), *lines()]))
    os.utime(path, (1, 1))
    return Written(LONG)


@kind("headers with blanks and umlauts, columns in another order")
def _(folder):
    rows = [f"{WORDS[q]};{comma(v)};x;{tag};{iso(t)}" for t, tag, v, q in READINGS]
    put(folder, [" Güte ; Wert (gerundet);;Meßstelle; Zeit in UTC", *rows])
    columns = {
        "quality_column": "Güte",
        "value_column": "Wert (gerundet)",
        "tag_column": "Meßstelle",
        "time_column": "Zeit in UTC",
    }
    return Written({**columns, "delimiter": ";", "decimal": ","})


# Files ------------------------------------------------------------------------------------------


@kind("gzip")
def _(folder):
    (folder / "export.csv.gz").write_bytes(
        gzip.compress("\n".join([header(), *lines(), ""]).encode())
    )
    return Written({**LONG, "path": "*.gz"})


@kind("zip")
def _(folder):
    with zipfile.ZipFile(folder / "export.zip", "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("export/", "")
        archive.writestr("export/readings.csv", "\n".join([header(), *lines(), ""]))
    return Written({**LONG, "path": "*.zip"})


@kind("zip of many files")
def _(folder):
    body = lines()
    with zipfile.ZipFile(folder / "january.zip", "w", zipfile.ZIP_DEFLATED) as archive:
        for number, at in enumerate(range(0, len(body), 20)):
            archive.writestr(f"day {number}.csv", "\n".join([header(), *body[at : at + 20], ""]))
        archive.writestr("__MACOSX/._day 1.csv", b"\x00\x05\x16\x07")
    return Written({**LONG, "path": "*.zip"})


@kind("rows from the newest to the oldest")
def _(folder):
    put(folder, [header(), *reversed(lines())])
    return Written(LONG)


@kind("one tag after the other")
def _(folder):
    put(folder, [header(), *lines(rows=sorted(READINGS, key=lambda row: row[1]))])
    return Written(LONG)


@kind("files whose names are not in the order of time")
def _(folder):
    body = lines()
    for number, at in enumerate(range(0, len(body), 10)):
        put(folder, [header(), *body[at : at + 10]], f"{9 - number:02d}.csv")
    return Written(LONG)


@kind("rows given again in a later file, corrected")
def _(folder):
    body = lines(value=lambda v: number(v if v is None else v + 1))
    put(folder, [header(), *body[:30]], "export 9.csv")
    put(folder, [header(), *lines()], "export 10.csv")
    return Written(LONG, problems=frozenset({"reading given again for the same tag and time"}))


# Times ------------------------------------------------------------------------------------------


@kind("ISO 8601 in UTC")
def _(folder):
    long(folder, time=lambda t: t.strftime("%Y-%m-%dT%H:%M:%S.%fZ"))
    return Written(LONG)


@kind("ISO 8601 with an offset")
def _(folder):
    long(folder, time=lambda t: t.tz_convert("Asia/Kolkata").isoformat())
    return Written(LONG)


@kind("ISO 8601 with seven decimals after a comma")
def _(folder):
    long(folder, time=lambda t: t.strftime("%Y-%m-%dT%H:%M:%S,%f0"), delimiter=";")
    return Written({**LONG, "delimiter": ";"})


@kind("local time")
def _(folder):
    long(folder, time=local("%Y-%m-%d %H:%M:%S.%f"))
    return Written({**LONG, "time_zone": ZONE})


@kind("the day first")
def _(folder):
    long(folder, time=tenths("%-d.%-m.%Y %-H:%M:%S.#"))
    return Written({**LONG, "time_format": "day_first"})


@kind("the month first, twelve hours, short years")
def _(folder):
    long(folder, time=tenths("%-m/%-d/%y %-I:%M:%S.# %p"))
    return Written({**LONG, "time_format": "month_first"})


@kind("twelve hours by a format")
def _(folder):
    long(folder, time=lambda t: t.strftime("%m/%d/%Y %I:%M:%S.%f %p"))
    return Written({**LONG, "time_format": "%m/%d/%Y %I:%M:%S.%f %p"})


@kind("names of months")
def _(folder):
    long(folder, time=lambda t: t.strftime("%d-%b-%y %H:%M:%S.%f"))
    return Written({**LONG, "time_format": "%d-%b-%y %H:%M:%S.%f"})


@kind("epoch seconds")
def _(folder):
    long(folder, time=lambda t: repr(t.timestamp()))
    return Written({**LONG, "time_format": "epoch_s"})


@kind("epoch milliseconds")
def _(folder):
    long(folder, time=lambda t: str(round(t.timestamp() * 1e3)))
    return Written({**LONG, "time_format": "epoch_ms"})


@kind("epoch microseconds")
def _(folder):
    long(folder, time=lambda t: str(round(t.timestamp() * 1e6)))
    return Written({**LONG, "time_format": "epoch_us"})


def serial(start, digits=10):
    def write(time):
        days = (time.tz_localize(None) - pd.Timestamp(start)) / pd.Timedelta(days=1)
        return f"{days:.{digits}f}"

    return write


@kind("spreadsheet days of the 1900 calendar, decimal commas")
def _(folder):
    # Day 45658 of that calendar is 1 January 2025 (what spreadsheets show; from memory).
    assert serial("1899-12-30", 0)(pd.Timestamp("2025-01-01", tz="UTC")) == "45658"
    write = serial("1899-12-30")
    long(folder, time=lambda t: write(t).replace(".", ","), delimiter=";", value=comma)
    return Written({**LONG, "time_format": "serial_1900", "delimiter": ";", "decimal": ","})


@kind("spreadsheet days of the 1904 calendar, local time")
def _(folder):
    write = serial("1904-01-01")
    long(folder, time=lambda t: write(t.tz_convert(ZONE)))
    return Written({**LONG, "time_format": "serial_1904", "time_zone": ZONE})


def two_columns(folder, date, clock, **options):
    rows = [
        ",".join([date(t), cell(tag), clock(t), number(v), WORDS[q]]) for t, tag, v, q in READINGS
    ]
    put(folder, ["Date,tag,Time,value,quality", *rows])
    return Written({**LONG, "time_column": ["Date", "Time"], **options})


@kind("date and time of day apart")
def _(folder):
    return two_columns(
        folder, lambda t: t.strftime("%Y-%m-%d"), lambda t: t.strftime("%H:%M:%S.%f")
    )


@kind("date and time of day apart, twelve hours, local time")
def _(folder):
    return two_columns(
        folder,
        local("%d/%m/%Y"),
        lambda t: tenths("%I:%M:%S.# %p")(t.tz_convert(ZONE)),
        time_format="day_first",
        time_zone=ZONE,
    )


# Values and quality -----------------------------------------------------------------------------


@kind("the site's own words for no value")
def _(folder):
    long(folder, value=lambda v: "gestört" if v is None else repr(v))
    return Written({**LONG, "bad_words": ["Gestört"]})


@kind("empty cells")
def _(folder):
    long(folder, value=lambda v: "" if v is None else repr(v))
    return Written(LONG)


@kind("infinities")
def _(folder):
    signs = iter(["inf", "-INF", "1e999"])
    long(folder, value=lambda v: next(signs) if v is None else repr(v))
    return Written(LONG, problems=frozenset({"value is not a number"}))


@kind("digital states")
def _(folder):
    def state(row):
        t, tag, v, q = row
        return t, tag, {1.0: "AUF", 0.0: "Zu"}[v] if tag == TAGS[2] else number(v), q

    long(folder, rows=[state(row) for row in READINGS], value=str)
    return Written({**LONG, "states": {"Auf": 1, "ZU": 0}})


@kind("values with signs, exponents and blanks")
def _(folder):
    long(folder, value=lambda v: number(v) if v is None else f" {v:+.9e} ")
    return Written(LONG)


@kind("quality as ranges of codes")
def _(folder):
    codes = {G: 101, U: 77, B: 3}
    long(folder, quality=codes.get)
    ranges = {"quality_bad": ["0-63"], "quality_uncertain": ["64-99"], "quality_good": ["100-199"]}
    return Written({**LONG, **ranges})


@kind("OPC UA status codes")
def _(folder):
    # Good, UncertainLastUsableValue, BadNoCommunication (values from IEC 62541; from memory).
    long(folder, quality={G: 0x00000000, U: 0x40900000, B: 0x80310000}.get)
    return Written({**LONG, "quality_kind": "opc_ua"})


@kind("OPC UA status codes with a sign, as texts and as names")
def _(folder):
    kinds = {
        G: iter(["0x00000000", "Good", "GoodClamped"] * 99),
        U: iter(["0x408F0000", "Uncertain_LastUsableValue", str(0x40900000)] * 99),
        B: iter([str(0x80310000 - (1 << 32)), "BadNoCommunication", "0xC0000000"] * 99),
    }
    long(folder, quality=lambda q: next(kinds[q]))
    return Written({**LONG, "quality_kind": "opc_ua"})


@kind("OPC classic quality words")
def _(folder):
    kinds = {
        G: iter(["192", "216", str(0x0100 + 192), "Good"] * 99),
        U: iter(["64", "80", "88"] * 99),
        B: iter(["0", "4", "24"] * 99),
    }
    long(folder, quality=lambda q: next(kinds[q]))
    return Written({**LONG, "quality_kind": "opc_classic"})


# Wide -------------------------------------------------------------------------------------------


@kind("wide")
def _(folder):
    return Written(wide(folder), with_quality=False)


@kind("wide with semicolons, decimal commas and the day first")
def _(folder):
    options = wide(folder, delimiter=";", value=comma, time=tenths("%d.%m.%Y %H:%M:%S,#"))
    marks = {"delimiter": ";", "decimal": ",", "time_format": "day_first"}
    return Written({**options, **marks}, with_quality=False)


@kind("wide with descriptions and units below the header")
def _(folder):
    after = [["", "Druck", "Stand", "Ventil"], ["", "bar(g)", "%", ""]]
    options = wide(folder, before=["Export", ""], after=after)
    return Written({**options, "skip_lines": 2, "rows_after_header": 2}, with_quality=False)


@kind("wide with date and time of day apart")
def _(folder):
    names = ("Datum", "Uhrzeit", *TAGS)
    rows = [[r[0][:10], *r] for r in wide_rows(time=iso)]
    rows = [[row[0], row[1][11:], *row[2:]] for row in rows]
    put(folder, [",".join(map(cell, row)) for row in (names, *rows)])
    columns = {"layout": "wide", "time_column": ["Datum", "Uhrzeit"]}
    return Written(columns, with_quality=False)


@kind("wide, zipped, UTF-16, tabulators")
def _(folder):
    text = "\n".join("\t".join(row) for row in (("t", *TAGS), *wide_rows()))
    with zipfile.ZipFile(folder / "export.zip", "w") as archive:
        archive.writestr("export.txt", (text + "\n").encode("utf-16"))
    options = {"layout": "wide", "time_column": "t", "delimiter": "tab", "encoding": "utf-16"}
    return Written({**options, "path": "*.zip"}, with_quality=False)


@kind("wide with states and words")
def _(folder):
    options = wide(
        folder, value=lambda v: {None: "Comm Fail", 1.0: "on", 0.0: "off"}.get(v, repr(v))
    )
    return Written({**options, "states": {"On": 1, "Off": 0}}, with_quality=False)


# Parquet ----------------------------------------------------------------------------------------


def parquet(folder, frame, name="export.parquet", types=None):
    table = pa.Table.from_pandas(frame, preserve_index=False)
    for column, kind_of in (types or {}).items():
        at = table.schema.get_field_index(column)
        table = table.set_column(at, column, table.column(column).cast(kind_of))
    pq.write_table(table, folder / name, row_group_size=16)


def long_frame(time=lambda t: t, quality=WORDS.get):
    return pd.DataFrame(
        [(time(t), tag, v, quality(q)) for t, tag, v, q in READINGS],
        columns=["time", "tag", "value", "quality"],
    )


def in_parquet(options=LONG, **more):
    return Written({"path": "*.parquet", **options, **more}, kind="parquet")


@kind("parquet with zoned timestamps")
def _(folder):
    parquet(folder, long_frame(lambda t: t.tz_convert(ZONE)))
    return in_parquet()


@kind("parquet with timestamps without a zone, nanoseconds, tags as dictionary")
def _(folder):
    kinds = {"time": pa.timestamp("ns"), "tag": pa.dictionary(pa.int32(), pa.string())}
    parquet(folder, long_frame(lambda t: t.tz_localize(None)), types=kinds)
    return in_parquet()


@kind("parquet with local timestamps")
def _(folder):
    parquet(folder, long_frame(lambda t: t.tz_convert(ZONE).tz_localize(None)))
    return in_parquet(time_zone=ZONE)


@kind("parquet with times and values as texts")
def _(folder):
    frame = long_frame(tenths("%d/%m/%Y %H:%M:%S.#"))
    frame["value"] = ["gestört" if pd.isna(v) else f" {v}" for v in frame["value"]]
    parquet(folder, frame)
    return in_parquet(time_format="day_first", bad_words=["gestört"])


@kind("parquet with epoch milliseconds, single precision and coded quality")
def _(folder):
    codes = {G: 192, U: 64, B: 0}
    frame = long_frame(lambda t: round(t.timestamp() * 1e3), codes.get)
    parquet(folder, frame, types={"value": pa.float32(), "quality": pa.uint16()})
    return in_parquet(time_format="epoch_ms", quality_kind="opc_classic")


@kind("parquet, one tag after the other, files out of order")
def _(folder):
    frame = long_frame()
    for number, tag in enumerate(TAGS):
        parquet(folder, frame[frame["tag"] == tag], f"{9 - number}.parquet")
    return in_parquet()


@kind("parquet, wide, whole numbers and truths among the columns")
def _(folder):
    frame = long_frame().pivot_table("value", "time", "tag", dropna=False).reset_index()
    frame[TAGS[2]] = frame[TAGS[2]].map({1.0: True, 0.0: False})
    levels = ["Bad" if pd.isna(v) else str(v) for v in frame[TAGS[1]]]
    parquet(folder, frame.assign(**{TAGS[1]: levels}))
    written = in_parquet({"layout": "wide"})
    written.with_quality = False
    return written
