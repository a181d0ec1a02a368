"""The first schema: figures, roll-ups, runs, baselines, alarms, events and views for people."""

# ruff: noqa: S608 - the SQL below is made of constants of this file

from __future__ import annotations

from typing import Any

import sqlalchemy as sa
from alembic import op

__all__ = ["down_revision", "revision", "upgrade"]

revision = "0001"
down_revision = None

# Frozen copies: a later change of the program's tables must not change what this revision makes.
_STREAM = (
    "mass_flow_kg_s", "pressure_bar", "temperature_degc", "enthalpy_kj_kg", "entropy_kj_kgk",
    "dryness", "energy_kw", "exergy_live_kw", "exergy_reference_kw", "u_mass_flow_kg_s",
    "u_exergy_live_kw",
)  # fmt: skip
_EQUIPMENT = (
    "load_kg_s", "exergy_in_live_kw", "exergy_out_live_kw", "destroyed_live_kw", "fuel_live_kw",
    "product_live_kw", "exergy_in_reference_kw", "exergy_out_reference_kw",
    "destroyed_reference_kw", "fuel_reference_kw", "product_reference_kw", "heat_loss_kw",
    "heat_loss_exergy_live_kw", "stored_rate_live_kw", "unaccounted_live_kw", "closure_live_kw",
    "mass_imbalance_kg_s", "energy_imbalance_kw", "u_destroyed_live_kw",
)  # fmt: skip
_LEDGER = (
    "t0_degc", "p0_bar", "supplied_live_kw", "used_live_kw", "lost_live_kw", "destroyed_live_kw",
    "stored_rate_live_kw", "imbalance_live_kw", "supplied_reference_kw", "used_reference_kw",
    "lost_reference_kw", "destroyed_reference_kw", "stored_rate_reference_kw",
    "imbalance_reference_kw",
)  # fmt: skip
_QUALITY = (
    "readings", "good", "uncertain", "bad", "out_of_range", "cells", "cells_missing", "cells_held",
)  # fmt: skip


def _required(kind: type[sa.types.TypeEngine[Any]], *names: str) -> list[sa.Column[Any]]:
    return [sa.Column(name, kind, nullable=False) for name in names]


def _optional(kind: type[sa.types.TypeEngine[Any]], *names: str) -> list[sa.Column[Any]]:
    return [sa.Column(name, kind) for name in names]


def _keyed(*names: str) -> list[sa.Column[Any]]:
    times = {"time", "hour", "start"}
    return [
        sa.Column(
            name,
            sa.BigInteger if name in times else sa.Integer,
            primary_key=True,
            autoincrement=False,
        )
        for name in names
    ]


def _site(*, key: bool = False) -> sa.Column[int]:
    return sa.Column(
        "site_id",
        sa.Integer,
        sa.ForeignKey("sites.site_id"),
        nullable=False,
        primary_key=key,
        autoincrement=False if key else "auto",
    )


def upgrade() -> None:
    """Make every table and view."""
    _dictionaries()
    _figures()
    _judgements()
    _views()


def _dictionaries() -> None:
    op.create_table(
        "sites",
        sa.Column("site_id", sa.Integer, primary_key=True),
        sa.Column("site", sa.Text, nullable=False, unique=True),
        *_required(sa.Text, "name"),
        *_required(sa.Integer, "interval_s"),
        *_required(sa.Text, "time_zone", "calendar"),
    )
    op.create_table(
        "subjects",
        sa.Column("subject_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "kind", "subject", "name", "detail"),
        sa.UniqueConstraint("site_id", "kind", "subject", name="subjects_once"),
    )
    op.create_table(
        "figure_names",
        sa.Column("figure_id", sa.Integer, primary_key=True),
        sa.Column("figure", sa.Text, nullable=False, unique=True),
    )
    op.create_table(
        "figures",
        sa.Column("subject_id", sa.Integer, sa.ForeignKey("subjects.subject_id"), primary_key=True),
        sa.Column(
            "figure_id", sa.Integer, sa.ForeignKey("figure_names.figure_id"), primary_key=True
        ),
        *_required(sa.Text, "label", "unit", "worse"),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "tags",
        sa.Column("tag_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "tag"),
        sa.UniqueConstraint("site_id", "tag", name="tags_once"),
    )
    op.create_table(
        "runs",
        sa.Column("run_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "job", "version", "site_hash"),
        *_required(sa.BigInteger, "started"),
        *_optional(sa.BigInteger, "ended"),
        *_required(sa.Text, "status"),
        *_optional(sa.BigInteger, "window_start", "window_end"),
        *_required(sa.BigInteger, "readings", "bad", "missing"),
        *_required(sa.Text, "message"),
    )
    op.create_index("runs_by_status", "runs", ["site_id", "status"])
    op.create_table(
        "watermarks",
        sa.Column("site_id", sa.Integer, sa.ForeignKey("sites.site_id"), primary_key=True),
        sa.Column("source", sa.Text, primary_key=True),
        *_required(sa.BigInteger, "time", "updated"),
        sqlite_with_rowid=False,
    )
    op.create_table("instance_holders", _site(key=True), *_required(sa.Text, "holder"))


def _figures() -> None:
    rated = {"stream_figures": _STREAM, "equipment_figures": _EQUIPMENT}
    for table, columns in rated.items():
        op.create_table(
            table,
            *_keyed("subject_id", "time"),
            *_optional(sa.Double, *columns),
            *_required(sa.Integer, "flag", "run_id"),
            sqlite_with_rowid=False,
        )
    op.create_table(
        "condition_figures",
        *_keyed("subject_id", "time", "figure_id"),
        *_optional(sa.Double, "value", "weight", "u_value"),
        *_required(sa.Integer, "flag", "run_id"),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "ledger_figures",
        *_keyed("site_id", "time"),
        *_optional(sa.Double, *_LEDGER),
        *_required(sa.Integer, "flag", "run_id"),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "tag_quality",
        *_keyed("tag_id", "hour"),
        *_required(sa.Integer, *_QUALITY, "run_id"),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "rollups",
        *_keyed("resolution", "subject_id", "start", "figure_id"),
        *_optional(sa.Double, "mean", "minimum", "maximum", "weight"),
        *_required(sa.Integer, "covered_s", "expected_s"),
        sqlite_with_rowid=False,
    )


def _judgements() -> None:
    op.create_table(
        "baselines",
        sa.Column("baseline_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "subject", "figure"),
        *_required(sa.BigInteger, "made", "reference_start", "reference_end"),
        *_required(sa.Text, "coefficients"),
        *_optional(sa.Double, "sigma", "phi"),
        *_required(sa.Integer, "points"),
        *_required(sa.Text, "reason"),
        *_optional(sa.BigInteger, "retired"),
    )
    op.create_index("baselines_by_figure", "baselines", ["site_id", "subject", "figure"])
    op.create_table(
        "drift_points",
        *_keyed("subject_id", "figure_id", "hour"),
        *_optional(sa.Double, "measured", "expected", "residual", "ewma", "limit"),
        *_required(sa.Integer, "cells", "judged"),
        *_optional(sa.Integer, "baseline_id"),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "alarms",
        sa.Column("alarm_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "subject", "figure", "kind", "state", "priority"),
        *_required(sa.BigInteger, "raised"),
        *_optional(sa.BigInteger, "cleared", "acknowledged", "shelved_until"),
        *_required(sa.Text, "message"),
        *_optional(sa.Double, "value"),
        *_required(sa.Text, "unit"),
        *_optional(sa.Double, "cost_per_day"),
        sa.UniqueConstraint("site_id", "subject", "figure", "kind", "raised", name="alarms_once"),
    )
    op.create_table(
        "alarm_transitions",
        sa.Column(
            "alarm_id",
            sa.Integer,
            sa.ForeignKey("alarms.alarm_id", ondelete="CASCADE"),
            primary_key=True,
        ),
        sa.Column("seq", sa.Integer, primary_key=True),
        *_required(sa.BigInteger, "time", "recorded"),
        *_required(sa.Text, "action", "from_state", "to_state", "who", "note"),
        *_optional(sa.BigInteger, "until"),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "alarm_actions",
        sa.Column("action_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "subject", "figure", "kind"),
        *_required(sa.BigInteger, "time", "recorded"),
        *_required(sa.Text, "action", "who", "note"),
        *_optional(sa.BigInteger, "until"),
        sa.UniqueConstraint(
            "site_id", "subject", "figure", "kind", "time", "action", "who", name="actions_once"
        ),
    )
    op.create_table(
        "events",
        sa.Column("event_id", sa.Integer, primary_key=True),
        _site(),
        *_required(sa.Text, "subject", "kind"),
        *_required(sa.BigInteger, "time"),
        *_required(sa.Text, "who", "note"),
    )
    op.create_index("events_by_time", "events", ["site_id", "time"])


def _views() -> None:
    """Views with names for ids and ISO 8601 UTC text for times, for a person with a SQL client."""
    sqlite = op.get_bind().dialect.name == "sqlite"

    def iso(column: str) -> str:
        if sqlite:
            return f"strftime('%Y-%m-%dT%H:%M:%SZ', {column}, 'unixepoch')"
        return (
            f"""to_char(to_timestamp({column}) at time zone 'UTC', 'YYYY-MM-DD"T"HH24:MI:SS"Z"')"""
        )

    def day(column: str) -> str:
        if sqlite:
            return f"strftime('%Y-%m-%d', {column}, 'unixepoch')"
        return f"to_char(to_timestamp({column}) at time zone 'UTC', 'YYYY-MM-DD')"

    named = "join subjects b on b.subject_id = f.subject_id join sites s on s.site_id = b.site_id"
    who = "s.site, b.subject, b.name"
    views = {
        "v_streams": f"select {who}, b.detail as medium, {iso('f.time')} as time_utc,"
        f" {_columns(*_STREAM, 'flag', 'run_id')} from stream_figures f {named}",
        "v_equipment": f"select {who}, b.detail as kind, {iso('f.time')} as time_utc,"
        f" {_columns(*_EQUIPMENT, 'flag', 'run_id')} from equipment_figures f {named}",
        "v_conditions": f"select {who}, n.figure, g.label, {iso('f.time')} as time_utc, f.value,"
        " g.unit, f.weight, f.u_value, f.flag, f.run_id"
        f" from condition_figures f {named} join figure_names n on n.figure_id = f.figure_id"
        " left join figures g on g.subject_id = f.subject_id and g.figure_id = f.figure_id",
        "v_ledger": f"select s.site, {iso('f.time')} as time_utc,"
        f" {_columns(*_LEDGER, 'flag', 'run_id')}"
        " from ledger_figures f join sites s on s.site_id = f.site_id",
        "v_rollups": f"select {who}, b.kind, n.figure, case f.resolution when 0 then 'hour'"
        " when 1 then 'shift' when 2 then 'day' when 3 then 'month' end as resolution,"
        f" {iso('f.start')} as start_utc, f.mean, f.minimum, f.maximum, f.weight, f.covered_s,"
        f" f.expected_s from rollups f {named} join figure_names n on n.figure_id = f.figure_id",
        "v_drift": f"select {who}, n.figure, {iso('f.hour')} as hour_utc, f.measured, f.expected,"
        ' f.residual, f.ewma, f."limit" as control_limit, f.cells, f.judged, f.baseline_id'
        f" from drift_points f {named} join figure_names n on n.figure_id = f.figure_id",
        "v_alarms": "select s.site, f.alarm_id, f.subject, f.figure, f.kind, f.state, f.priority,"
        f" {iso('f.raised')} as raised_utc, {iso('f.cleared')} as cleared_utc,"
        f" {iso('f.acknowledged')} as acknowledged_utc, f.message, f.value, f.unit,"
        " f.cost_per_day from alarms f join sites s on s.site_id = f.site_id",
        "v_tag_quality_by_day": f"select s.site, t.tag, {day('f.hour')} as day_utc,"
        f" {', '.join(f'sum(f.{name}) as {name}' for name in _QUALITY)}"
        " from tag_quality f join tags t on t.tag_id = f.tag_id"
        f" join sites s on s.site_id = t.site_id group by s.site, t.tag, {day('f.hour')}",
    }
    for name, query in views.items():
        op.execute(f"create view {name} as {query}")


def _columns(*names: str) -> str:
    return ", ".join(f"f.{name}" for name in names)
