"""Everything that a site's store holds, as tables to compare row by row."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pandas as pd
import pytest

from monitor.store.engine import make_engine

if TYPE_CHECKING:
    from collections.abc import Callable

# Numbers that the store deals out, and the wall clock's times of writing: nobody's figures.
_RUN = ["run_id"]
TABLES: dict[str, list[str]] = {
    "stream_figures": _RUN,
    "equipment_figures": _RUN,
    "condition_figures": _RUN,
    "ledger_figures": _RUN,
    "tag_quality": _RUN,
    "rollups": [],
    "watermarks": ["updated"],
    "baselines": ["baseline_id", "made", "retired"],
    "drift_points": ["baseline_id"],
    "alarms": ["alarm_id"],
    "alarm_transitions": ["alarm_id", "recorded"],
}
# A transaction that came to nothing leaves gaps in PostgreSQL's numbers, so rows go by name.
NAMES = {
    "subject_id": "select subject_id as id, kind || ' ' || subject as name from subjects",
    "figure_id": "select figure_id as id, figure as name from figure_names",
    "tag_id": "select tag_id as id, tag as name from tags",
}


@pytest.fixture
def whole_store() -> Callable[..., dict[str, pd.DataFrame]]:
    """Read every row of a plant's store but the runs, without the numbers that it deals out."""

    def read(plant, store: str = "sqlite:///figures.sqlite") -> dict[str, pd.DataFrame]:
        engine = make_engine(store, plant.folder)
        with engine.connect() as connection:
            names = {
                column: pd.read_sql_query(query, connection, index_col="id")["name"]
                for column, query in NAMES.items()
            }
            found = {}
            for table, dealt in TABLES.items():
                rows = pd.read_sql_query(f"select * from {table}", connection)
                known = {c: rows[c].map(names[c]) for c in names if c in rows}
                found[table] = _sorted(rows.assign(**known).drop(columns=dealt))
        engine.dispose()
        return found

    return read


def _sorted(table: pd.DataFrame) -> pd.DataFrame:
    return table.sort_values(list(table.columns), ignore_index=True)
