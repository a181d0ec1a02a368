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


@pytest.fixture
def whole_store() -> Callable[..., dict[str, pd.DataFrame]]:
    """Read every row of a plant's store but the runs, without the numbers that it deals out."""

    def read(plant, store: str = "sqlite:///figures.sqlite") -> dict[str, pd.DataFrame]:
        engine = make_engine(store, plant.folder)
        with engine.connect() as connection:
            found = {
                table: _sorted(
                    pd.read_sql_query(f"select * from {table}", connection).drop(columns=dealt)
                )
                for table, dealt in TABLES.items()
            }
        engine.dispose()
        return found

    return read


def _sorted(table: pd.DataFrame) -> pd.DataFrame:
    return table.sort_values(list(table.columns), ignore_index=True)
