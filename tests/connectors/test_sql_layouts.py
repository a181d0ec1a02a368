"""Wide tables, the site's own queries, and what other databases need, on two real ones."""

from __future__ import annotations

import sqlite3

import numpy as np
import pandas as pd
import psycopg
import pytest
from sqlalchemy import create_engine, text

import connectors.sql_engine
from connectors import parse_options
from connectors.base import READING_COLUMNS, ConnectorError, Quality, Window
from connectors.sql_cells import CellReader
from connectors.sql_engine import Database
from connectors.sql_source import SqlSource
from connectors.sql_times import SqlTimes
from connectors.tidy import ProblemCount

HOSTILE = 'x"; drop table readings;-- %s :start'
DAY = Window(pd.Timestamp("2026-01-31", tz="UTC"), pd.Timestamp("2026-02-01", tz="UTC"))
ZONED = "timestamp with time zone"
QUERY = """
select t.at as time, t.name || '' as tag, t.v as value, t.q as quality
from history t where t.at >= :start and t.at < :end and t.name in :tags
"""


def rows(result):
    return [
        (str(tag), f"{t:%H:%M}", None if np.isnan(v) else v, Quality(q).name)
        for tag, t, v, q in result.readings[list(READING_COLUMNS)].itertuples(index=False)
    ]


def counts(result):
    return {problem.what.split(":")[0]: problem.count for problem in result.problems}


@pytest.fixture(params=["sqlite", pytest.param("postgres", marks=pytest.mark.postgres)])
def database(request, tmp_path):
    """The URL of an empty historian database, once on SQLite and once on PostgreSQL."""
    if request.param == "sqlite":
        sqlite3.connect(tmp_path / "historian.sqlite").close()
        return f"sqlite:///{tmp_path / 'historian.sqlite'}"
    return request.getfixturevalue("postgres_url")


@pytest.fixture
def source(tmp_path):
    """Opens a source that is closed after the test."""
    opened = []

    def open_it(url, **options):
        opened.append(SqlSource(parse_options("sql", {"url": url, **options}), tmp_path))
        return opened[-1]

    yield open_it
    for one in opened:
        one.close()


def fill(url, create, table, cells):
    engine = create_engine(url)
    with engine.begin() as connection:
        connection.exec_driver_sql(create)
        marks = ", ".join(f":c{n}" for n in range(len(cells[0])))
        connection.execute(
            text(f"insert into {table} values ({marks})"),
            [{f"c{n}": cell for n, cell in enumerate(row)} for row in cells],
        )
    engine.dispose()


def history(url, kind=ZONED, write=str):
    times = pd.date_range("2026-01-31 05:58", periods=5, freq="min", tz="UTC")
    tags = ("a", HOSTILE, "other")
    cells = [
        (write(time), tag, minute + place / 4, "Good" if minute else "Bad")
        for minute, time in enumerate(times)
        for place, tag in enumerate(tags)
    ]
    fill(
        url,
        f"create table history (at {kind}, name varchar(60), v double precision, q text)",
        "history",
        cells,
    )


HISTORY = [
    *[("a", f"0{5 + (n > 1)}:{(58 + n) % 60:02d}", float(n), "GOOD" if n else "BAD")
      for n in range(5)],
    *[(HOSTILE, f"0{5 + (n > 1)}:{(58 + n) % 60:02d}", n + 0.25, "GOOD" if n else "BAD")
      for n in range(5)],
]  # fmt: skip


# Wide -------------------------------------------------------------------------------------------


def wide(url, kind=ZONED):
    quoted = HOSTILE.replace('"', '""').replace("%", "%%" if url.startswith("postgres") else "%")
    fill(
        url,
        f'create table plant (time {kind}, a double precision, "{quoted}" text, n integer)',
        "plant",
        [
            ("2026-01-31 06:00:00+00:00", 1.5, "4.5", 7),
            ("2026-01-31 06:01:00+00:00", None, "Bad", 8),
            ("2026-01-31 06:02:00+00:00", 2.5, "", None),
            ("2026-02-01 00:00:00+00:00", 9.5, "9", 9),
        ],
    )


WIDE = [
    ("a", "06:00", 1.5, "GOOD"),
    ("a", "06:02", 2.5, "GOOD"),
    ("n", "06:00", 7.0, "GOOD"),
    ("n", "06:01", 8.0, "GOOD"),
    (HOSTILE, "06:00", 4.5, "GOOD"),
    (HOSTILE, "06:01", None, "BAD"),
]


def test_a_wide_table_gives_no_reading_for_a_null(database, source):
    wide(database)
    reader = source(database, table="plant", layout="wide", chunk_rows=2)
    assert rows(reader.read(["a", "n", HOSTILE, "absent", "time"], DAY)) == WIDE
    assert reader.read(["absent"], DAY).readings.empty
    probe = reader.probe()
    assert set(probe.tags) == {"a", "n", HOSTILE}
    assert probe.last == pd.Timestamp("2026-02-01", tz="UTC")


def test_wide_columns_are_asked_for_in_batches_and_bad_times_counted_once(
    database, source, monkeypatch
):
    monkeypatch.setattr("connectors.sql_table._MOST_COLUMNS", 2)
    names = [f"c{n}" for n in range(5)]
    columns = ", ".join(f"{name} real" for name in names)
    cells = [(t, *range(5)) for t in ("2026-01-31T06:00:00", "2026-01-31T06:61:00")]
    fill(database, f"create table plant (time text, {columns})", "plant", cells)
    reader = source(database, table="plant", layout="wide", time_kind="text_iso")
    result = reader.read(names, DAY)
    assert [v for _, _, v, _ in rows(result)] == [0, 1, 2, 3, 4]
    assert counts(result) == {"row dropped": 1}


# The site's own query ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("kind", "write", "options"),
    [
        (ZONED, str, {"time_kind": "timestamp_zoned"}),
        ("timestamp", lambda t: str(t)[:19], {"time_kind": "timestamp_local"}),
        (
            "timestamp",
            lambda t: str(t.tz_convert("Europe/Vienna"))[:19],
            {"time_kind": "timestamp_local", "time_zone": "Europe/Vienna"},
        ),
        ("bigint", lambda t: int(t.timestamp()), {"time_kind": "epoch_s"}),
        ("bigint", lambda t: int(t.timestamp()) * 1000, {"time_kind": "epoch_ms"}),
        ("bigint", lambda t: int(t.timestamp()) * 1_000_000, {"time_kind": "epoch_us"}),
        ("text", lambda t: t.isoformat(), {"time_kind": "text_iso"}),
        ("text", lambda t: t.tz_convert("Asia/Kolkata").isoformat(), {"time_kind": "text_iso"}),
        ("text", lambda t: str(t)[:19], {"time_kind": "text_iso"}),
    ],
    ids=["zoned", "naive", "local", "epoch s", "epoch ms", "epoch us", "T", "offset", "blank"],
)
def test_a_query_is_bound_to_the_window_and_the_tags(database, source, kind, write, options):
    history(database, kind, write)
    reader = source(
        database,
        query=QUERY,
        tag_query="select distinct name from history",
        quality_column="quality",
        **options,
    )
    result = reader.read(["a", HOSTILE, "absent"], DAY)
    assert rows(result) == HISTORY
    assert result.problems == ()
    short = Window(pd.Timestamp("2026-01-31 05:59Z"), pd.Timestamp("2026-01-31 06:01Z"))
    assert rows(reader.read(["a"], short)) == HISTORY[1:3]
    probe = reader.probe()
    assert set(probe.tags) == {"a", HOSTILE, "other"}
    assert probe.first == pd.Timestamp("2026-01-31 05:58", tz="UTC")
    assert probe.last == pd.Timestamp("2026-01-31 06:02", tz="UTC")


def test_a_query_without_tags_returns_all_and_keeps_those_asked_for(database, source):
    history(database)
    query = QUERY.replace(" and t.name in :tags", "")
    options = {"query": query, "quality_column": "quality", "time_kind": "timestamp_zoned"}
    reader = source(database, **options, chunk_rows=4)
    assert rows(reader.read(["a", HOSTILE], DAY)) == HISTORY
    assert set(reader.probe().tags) == {"a", HOSTILE, "other"}


def test_a_wide_query(database, source):
    history(database)
    query = """select at as time, max(case when name = 'a' then v end) as "Tag A", 5 as five
        from history where at >= :start and at < :end group by at"""
    reader = source(database, query=query, layout="wide", time_kind="timestamp_zoned")
    result = reader.read(["Tag A", "five"], DAY)
    assert rows(result)[:5] == [("Tag A", t, v, "GOOD") for _, t, v, _ in HISTORY[:5]]
    assert len(result.readings) == 10
    assert reader.probe().tags == ("Tag A", "five")


def test_the_like_of_a_query_and_its_casts_are_left_alone(database, source):
    history(database)
    query = QUERY + r" and t.name like '%a%' and t.v < 1e9 and ' \:x' <> ''"
    reader = source(
        database, query=query, tag_query="select 'a'", time_kind="timestamp_zoned",
        quality_column="quality",
    )  # fmt: skip
    assert rows(reader.read(["a"], DAY)) == HISTORY[:5]


def test_a_query_that_returns_other_columns_is_told(database, source):
    history(database)
    reader = source(
        database, query=QUERY.replace(" as tag", " as tags"), tag_query="select 'a'",
        time_kind="timestamp_zoned",
    )  # fmt: skip
    with pytest.raises(ConnectorError, match=r"no column 'tag' \(tag_column\); nearest is 'tags'"):
        reader.read(["a"], DAY)


@pytest.mark.parametrize(
    "query",
    [
        "delete from history where at >= :start and at < :end returning *",
        "drop table history -- :start :end",
        "update history set v = 0 where at >= :start and at < :end",
    ],
)
def test_a_query_cannot_write(database, source, query):
    history(database)
    reader = source(database, query=query, time_kind="timestamp_zoned")
    # SQLite says so; PostgreSQL does not even take such a statement for a cursor.
    with pytest.raises(ConnectorError, match=r"(?i)read.?only|syntax error|bindings"):
        reader.read(["a"], DAY)
    engine = create_engine(database)
    with engine.connect() as connection:
        assert connection.execute(text("select sum(v) from history")).scalar() == 33.75
    engine.dispose()


def test_a_query_of_an_empty_table_gives_nothing(database, source):
    history(database)
    options = {"query": QUERY, "tag_query": "select 'none'", "time_kind": "timestamp_zoned"}
    reader = source(database, **options)
    assert reader.read(["none"], DAY).readings.empty
    probe = reader.probe()
    assert (probe.tags, probe.first, probe.last) == (("none",), None, None)


# Databases --------------------------------------------------------------------------------------


def test_more_tags_than_a_statement_may_name(database, source):
    tags = [f"T{n:05d}" for n in range(10_400)]
    fill(
        database, f"create table readings (time {ZONED}, tag text, value real)", "readings",
        [("2026-01-31 06:00:00+00:00", tag, 1.0) for tag in tags],
    )  # fmt: skip
    assert list(source(database, table="readings").read(tags, DAY).readings["tag"]) == tags


SLOW = """with recursive n(i) as (select 1 union all select i + 1 from n where i < 500000000)
    select count(*) from n"""


def test_a_statement_that_takes_too_long_is_given_up(database, tmp_path):
    options = parse_options("sql", {"url": database, "table": "t", "statement_timeout": 0.2})
    waits = []
    reader = Database(options, tmp_path, waits.append)
    with pytest.raises(ConnectorError, match="statement timeout"):
        reader.run(lambda c: c.execute(text(SLOW)).scalar())
    assert waits == []
    assert reader.run(lambda c: c.execute(text("select 1")).scalar()) == 1
    reader.close()


def test_a_slow_reader_of_many_chunks_is_not_given_up(tmp_path):
    # The clock starts anew with each chunk: the time between them is the reader's own.
    url = f"sqlite:///{tmp_path / 'r.sqlite'}"
    fill(url, "create table t (a integer)", "t", [(n,) for n in range(2_000)])
    options = {"url": url, "table": "t", "statement_timeout": 0.3, "chunk_rows": 100}
    reader = Database(parse_options("sql", options), tmp_path)

    def work(connection):
        total = 0
        for _, (cells,) in reader.stream(connection, text("select a from t")):
            total += len(cells)
            reader._deadline -= 0.25  # as if that much time had gone by
        return total

    assert reader.run(work) == 2_000
    reader.close()


class Session:
    """What a driver's connection is asked for."""

    def __init__(self, version=""):
        self.said, self.version = [], version

    def cursor(self):
        return self

    def execute(self, statement):
        self.said.append(statement)

    def fetchone(self):
        return (self.version,)

    def close(self):
        pass


@pytest.mark.parametrize(
    ("dialect", "version", "said", "attributes"),
    [
        ("mysql", "8.4.3", "SET SESSION max_execution_time = 2500", {}),
        ("mysql", "11.4.2-MariaDB", "SET SESSION max_statement_time = 2.500", {}),
        ("mssql", "", None, {"timeout": 2}),
        ("oracle", "", None, {"call_timeout": 2500}),
    ],
)
def test_sessions_of_other_servers_get_a_time_out_in_their_own_way(
    dialect, version, said, attributes
):
    # There is no such server here: this checks what would be said to one, not what it does.
    session = Session(version)
    connectors.sql_engine._SESSIONS[dialect](session, 2.5)
    if said:
        assert session.said[0] == "SET SESSION TRANSACTION READ ONLY"
        assert session.said[-1] == said
    for name, value in attributes.items():
        assert getattr(session, name) == value


@pytest.mark.postgres
def test_a_server_of_another_time_zone_changes_nothing(postgres_url, source):
    history(postgres_url, "timestamp", lambda t: str(t)[:19])
    with psycopg.connect(postgres_url.replace("+psycopg", ""), autocommit=True) as connection:
        name = connection.info.dbname
        connection.execute(f"alter database {name} set timezone to 'Asia/Tokyo'")
    query = QUERY.replace("t.at as time", "t.at at time zone 'UTC' as time")
    reader = source(
        postgres_url, query=query, tag_query="select 'a'", time_kind="timestamp_zoned",
        quality_column="quality",
    )  # fmt: skip
    assert rows(reader.read(["a"], DAY)) == HISTORY[:5]


def test_tags_that_a_database_takes_for_the_same_are_the_ones_asked_for():
    # SQL Server and MySQL compare names without regard to capitals and blanks at the end.
    options = parse_options("sql", {"url": "sqlite:///r", "table": "t", "time_kind": "epoch_s"})
    times = SqlTimes.of(None, options, is_text_store=False)
    columns = [(0, 60, 120), ("Pt-1  ", "PT-1", "FT-2"), (1.0, 2.0, 3.0)]
    cells = CellReader(options)
    for collated, tags in ((True, [0, 0]), (False, [0])):
        found = cells.long(columns, {"PT-1": 0}, times, ProblemCount(), collated=collated)
        assert found.tag.tolist() == tags
    assert cells.long(columns, {}, times, ProblemCount(), collated=True).time.tolist() == []
