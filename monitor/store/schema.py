"""The tables as this version of the program sees them.

The migrations make them; a test compares the two. Times are UTC seconds since 1970-01-01 (BIGINT).
The big tables are keyed by a small integer and the time, and SQLite keeps them in key order
(WITHOUT ROWID), so that a series is read, and a window is written, in one piece. They carry no
foreign keys: `monitor.store.write` takes every id from the dictionary tables in the same
transaction, and a check for each of millions of rows would double the time of a write.
"""

from __future__ import annotations

import sqlalchemy as sa

from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
)

__all__ = [
    "RESOLUTIONS",
    "REVISIONS",
    "VERSION_TABLE",
    "alarm_actions",
    "alarm_transitions",
    "alarms",
    "baselines",
    "condition_figures",
    "daemons",
    "drift_points",
    "equipment_figures",
    "events",
    "figure_names",
    "figures",
    "instance_holders",
    "jobs",
    "ledger_figures",
    "metadata",
    "notifications",
    "rollups",
    "runs",
    "sites",
    "stream_figures",
    "subjects",
    "tag_quality",
    "tags",
    "watermarks",
]

REVISIONS = ("0001", "0002", "0003", "0004", "0005", "0006")
"""Every schema revision this program knows, oldest first; the last one is what it works with."""

VERSION_TABLE = "lostwork_schema"

RESOLUTIONS = {"hour": 0, "shift": 1, "day": 2, "month": 3}
"""How a roll-up's resolution is written in the ``rollups`` table."""

metadata = sa.MetaData()


def _id(name: str) -> sa.Column[int]:
    return sa.Column(name, sa.Integer, primary_key=True)


def _key(name: str, kind: type[sa.Integer] = sa.Integer) -> sa.Column[int]:
    return sa.Column(name, kind, primary_key=True, autoincrement=False)


def _time(name: str) -> sa.Column[int]:
    return sa.Column(name, sa.BigInteger, nullable=False)


def _maybe_time(name: str) -> sa.Column[int]:
    return sa.Column(name, sa.BigInteger)


def _text(name: str) -> sa.Column[str]:
    return sa.Column(name, sa.Text, nullable=False)


def _count(name: str) -> sa.Column[int]:
    return sa.Column(name, sa.Integer, nullable=False)


def _number(name: str) -> sa.Column[float]:
    return sa.Column(name, sa.Double)


def _site() -> sa.Column[int]:
    return sa.Column("site_id", sa.Integer, sa.ForeignKey("sites.site_id"), nullable=False)


def _site_key() -> sa.Column[int]:
    return sa.Column(
        "site_id", sa.Integer, sa.ForeignKey("sites.site_id"), primary_key=True, autoincrement=False
    )


sites = sa.Table(
    "sites",
    metadata,
    _id("site_id"),
    sa.Column("site", sa.Text, nullable=False, unique=True),
    _text("name"),
    _count("interval_s"),
    _text("time_zone"),
    # What the shift, day and month roll-ups were made with: see `monitor.store.spans`.
    _text("calendar"),
)
subjects = sa.Table(
    "subjects",
    metadata,
    _id("subject_id"),
    _site(),
    _text("kind"),
    _text("subject"),
    _text("name"),
    _text("detail"),
    sa.UniqueConstraint("site_id", "kind", "subject", name="subjects_once"),
)
figure_names = sa.Table(
    "figure_names",
    metadata,
    _id("figure_id"),
    sa.Column("figure", sa.Text, nullable=False, unique=True),
)
figures = sa.Table(
    "figures",
    metadata,
    sa.Column("subject_id", sa.Integer, sa.ForeignKey("subjects.subject_id"), primary_key=True),
    sa.Column("figure_id", sa.Integer, sa.ForeignKey("figure_names.figure_id"), primary_key=True),
    _text("label"),
    _text("unit"),
    _text("worse"),
    sqlite_with_rowid=False,
)
tags = sa.Table(
    "tags",
    metadata,
    _id("tag_id"),
    _site(),
    _text("tag"),
    sa.UniqueConstraint("site_id", "tag", name="tags_once"),
)
runs = sa.Table(
    "runs",
    metadata,
    _id("run_id"),
    _site(),
    _text("job"),
    _text("version"),
    _text("site_hash"),
    _time("started"),
    _maybe_time("ended"),
    _text("status"),
    _maybe_time("window_start"),
    _maybe_time("window_end"),
    sa.Column("readings", sa.BigInteger, nullable=False),
    sa.Column("bad", sa.BigInteger, nullable=False),
    sa.Column("missing", sa.BigInteger, nullable=False),
    _text("message"),
    sa.Index("runs_by_status", "site_id", "status"),
)
stream_figures = sa.Table(
    "stream_figures",
    metadata,
    _key("subject_id"),
    _key("time", sa.BigInteger),
    *(_number(name) for name in STREAM_COLUMNS),
    _count("flag"),
    _count("run_id"),
    sqlite_with_rowid=False,
)
equipment_figures = sa.Table(
    "equipment_figures",
    metadata,
    _key("subject_id"),
    _key("time", sa.BigInteger),
    *(_number(name) for name in EQUIPMENT_COLUMNS),
    _count("flag"),
    _count("run_id"),
    sqlite_with_rowid=False,
)
condition_figures = sa.Table(
    "condition_figures",
    metadata,
    _key("subject_id"),
    _key("time", sa.BigInteger),
    _key("figure_id"),
    *(_number(name) for name in CONDITION_COLUMNS),
    _count("flag"),
    _count("run_id"),
    sqlite_with_rowid=False,
)
ledger_figures = sa.Table(
    "ledger_figures",
    metadata,
    _key("site_id"),
    _key("time", sa.BigInteger),
    *(_number(name) for name in LEDGER_COLUMNS),
    _count("flag"),
    _count("run_id"),
    sqlite_with_rowid=False,
)
tag_quality = sa.Table(
    "tag_quality",
    metadata,
    _key("tag_id"),
    _key("hour", sa.BigInteger),
    *(_count(name) for name in QUALITY_COLUMNS),
    sa.Column("digest", sa.BigInteger, nullable=False, server_default="0"),
    _count("run_id"),
    sqlite_with_rowid=False,
)
rollups = sa.Table(
    "rollups",
    metadata,
    _key("resolution"),
    _key("subject_id"),
    _key("start", sa.BigInteger),
    _key("figure_id"),
    _number("mean"),
    _number("minimum"),
    _number("maximum"),
    _number("weight"),
    _count("covered_s"),
    _count("expected_s"),
    sqlite_with_rowid=False,
)
watermarks = sa.Table(
    "watermarks",
    metadata,
    sa.Column("site_id", sa.Integer, sa.ForeignKey("sites.site_id"), primary_key=True),
    sa.Column("source", sa.Text, primary_key=True),
    _time("time"),
    _time("updated"),
    sqlite_with_rowid=False,
)
baselines = sa.Table(
    "baselines",
    metadata,
    _id("baseline_id"),
    _site(),
    _text("subject"),
    _text("figure"),
    _time("made"),
    _time("reference_start"),
    _time("reference_end"),
    _text("coefficients"),
    _number("sigma"),
    _number("phi"),
    _count("points"),
    _text("reason"),
    _maybe_time("retired"),
    sa.Index("baselines_by_figure", "site_id", "subject", "figure"),
)
drift_points = sa.Table(
    "drift_points",
    metadata,
    _key("subject_id"),
    _key("figure_id"),
    _key("hour", sa.BigInteger),
    _number("measured"),
    _number("expected"),
    _number("residual"),
    _number("ewma"),
    _number("limit"),
    _count("cells"),
    _count("judged"),
    sa.Column("baseline_id", sa.Integer),
    sqlite_with_rowid=False,
)
alarms = sa.Table(
    "alarms",
    metadata,
    _id("alarm_id"),
    _site(),
    _text("subject"),
    _text("figure"),
    _text("kind"),
    _text("state"),
    _text("priority"),
    _time("raised"),
    _maybe_time("cleared"),
    _maybe_time("acknowledged"),
    _maybe_time("shelved_until"),
    _text("message"),
    _number("value"),
    _text("unit"),
    _number("cost_per_day"),
    sa.UniqueConstraint("site_id", "subject", "figure", "kind", "raised", name="alarms_once"),
)
alarm_transitions = sa.Table(
    "alarm_transitions",
    metadata,
    sa.Column(
        "alarm_id",
        sa.Integer,
        sa.ForeignKey("alarms.alarm_id", ondelete="CASCADE"),
        primary_key=True,
    ),
    sa.Column("seq", sa.Integer, primary_key=True),
    _time("time"),
    _time("recorded"),
    _text("action"),
    _text("from_state"),
    _text("to_state"),
    _text("who"),
    _text("note"),
    _maybe_time("until"),
    sqlite_with_rowid=False,
)
alarm_actions = sa.Table(
    "alarm_actions",
    metadata,
    _id("action_id"),
    _site(),
    _text("subject"),
    _text("figure"),
    _text("kind"),
    _time("time"),
    _time("recorded"),
    _text("action"),
    _text("who"),
    _text("note"),
    _maybe_time("until"),
    sa.UniqueConstraint(
        "site_id", "subject", "figure", "kind", "time", "action", "who", name="actions_once"
    ),
)
events = sa.Table(
    "events",
    metadata,
    _id("event_id"),
    _site(),
    _text("subject"),
    _text("kind"),
    _time("time"),
    _text("who"),
    _text("note"),
    sa.Index("events_by_time", "site_id", "time"),
)
notifications = sa.Table(
    "notifications",
    metadata,
    _id("notification_id"),
    _site(),
    _text("target"),
    # What happened to what and when, so that it is told to a target once.
    _text("key"),
    _text("about"),
    _text("event"),
    # When the alarm was raised, or the job began to fail: tells one time it happened from the next.
    _time("began"),
    _time("time"),
    _time("queued"),
    _text("state"),
    _count("tries"),
    _time("due"),
    _maybe_time("ended"),
    _text("error"),
    _text("content"),
    sa.UniqueConstraint("site_id", "target", "key", name="notifications_once"),
    sa.Index("notifications_by_state", "site_id", "target", "state"),
)
instance_holders = sa.Table("instance_holders", metadata, _site_key(), _text("holder"))
daemons = sa.Table(
    "daemons",
    metadata,
    _site_key(),
    _count("process"),
    _text("host"),
    _text("version"),
    _time("started"),
    _time("seen"),
    # None while it runs, and when it died.
    _maybe_time("ended"),
)
jobs = sa.Table(
    "jobs",
    metadata,
    _site_key(),
    sa.Column("job", sa.Text, primary_key=True),
    _maybe_time("last"),
    _maybe_time("next"),
    _maybe_time("failing_since"),
    _text("cause"),
    _count("failures"),
    sqlite_with_rowid=False,
)
