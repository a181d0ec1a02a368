"""Old stores come up to date with what is in them."""

from __future__ import annotations

from pathlib import Path

import pytest
import sqlalchemy as sa
import store_samples as samples
from alembic import command
from alembic.config import Config

import monitor.store
from monitor.store import schema
from monitor.store.open import open_store

START = samples.at("2025-06-01")


@pytest.fixture
def old_store(store_url):
    """A store as revision 0002 left it, with a tag's quality of two hours in it."""
    config = Config()
    config.set_main_option(
        "script_location", str(Path(monitor.store.__file__).parent / "migrations")
    )
    config.set_main_option("path_separator", "os")
    engine = sa.create_engine(store_url.replace("postgresql://", "postgresql+psycopg://"))
    with engine.begin() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, "0002")
        connection.exec_driver_sql("insert into sites values (1, 'mill', 'Mill', 900, 'UTC', '')")
        connection.exec_driver_sql("insert into tags values (1, 1, 'PT-1')")
        for hour in (START, START + 3600):
            connection.exec_driver_sql(
                f"insert into tag_quality values (1, {hour}, 60, 50, 4, 3, 3, 4, 1, 0, 7)"
            )
    engine.dispose()
    return store_url


def test_a_store_from_before_the_checks_keeps_its_counts_and_has_found_nothing(old_store, tmp_path):
    with open_store(old_store, tmp_path) as store:
        rows = store.site("mill").tag_quality(START, START + 7200)
        assert rows["good"].tolist() == [50, 50]
        assert rows["cells_missing"].tolist() == [1, 1]
        for name in ("too_fast", "spike", "out_of_order", "ambiguous", "cells_stuck"):
            assert rows[name].tolist() == [0, 0]
        with store.engine.connect() as connection:
            found = connection.exec_driver_sql(f"select version_num from {schema.VERSION_TABLE}")
            assert found.scalar() == schema.REVISIONS[-1]
            view = connection.exec_driver_sql(
                "select day_utc, readings, spike, cells_stuck from v_tag_quality_by_day"
            )
            assert view.all() == [("2025-06-01", 120, 0, 0)]
