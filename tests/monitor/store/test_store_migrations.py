"""Old stores come up to date from every revision there was, with all that is in them."""

from __future__ import annotations

from pathlib import Path

import pytest
import sqlalchemy as sa
import store_samples as samples
from alembic import command
from alembic.config import Config

import monitor.store
from monitor.store import schema
from monitor.store.engine import make_engine
from monitor.store.open import open_store

START = samples.at("2025-06-01")


def upgrade(url, folder, revision):
    """Bring a store to a revision, as the program of that time did; its engine."""
    config = Config()
    config.set_main_option(
        "script_location", str(Path(monitor.store.__file__).parent / "migrations")
    )
    config.set_main_option("path_separator", "os")
    engine = make_engine(url, folder)
    with engine.begin() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, revision)
    return engine


def filled(engine, number):
    """One row in each table of an old store, made of nothing but its own columns; all rows."""
    tables = [t for t in sa.inspect(engine).get_table_names() if t != schema.VERSION_TABLE]
    metadata = sa.MetaData()
    metadata.reflect(engine, only=tables)
    with engine.begin() as connection:
        for table in metadata.sorted_tables:
            connection.execute(sa.insert(table).values(row(table, number)))
    return rows(engine, {t.name: [c.name for c in t.columns] for t in metadata.sorted_tables})


def row(table, number):
    def value(column):
        if column.name == "site":
            return "mill"
        if column.name in {"time", "hour", "start"}:
            return START
        if column.name.endswith("_id"):
            return 1
        kind = column.type.python_type
        return f"{column.name} é'{number}" if kind is str else kind(number)

    return {column.name: value(column) for column in table.columns}


def rows(engine, columns):
    with engine.connect() as connection:
        return {
            name: [
                tuple(found)
                for found in connection.execute(
                    sa.select(*(sa.column(c) for c in own)).select_from(sa.table(name))
                )
            ]
            for name, own in columns.items()
        }


@pytest.mark.parametrize("revision", schema.REVISIONS)
def test_every_row_of_an_old_store_is_kept(store_url, tmp_path, revision):
    engine = upgrade(store_url, tmp_path, revision)
    before = filled(engine, 7)
    assert all(len(found) == 1 for found in before.values())
    columns = {name: [c["name"] for c in sa.inspect(engine).get_columns(name)] for name in before}
    engine.dispose()
    with open_store(store_url, tmp_path) as store:
        assert rows(store.engine, columns) == before
        with store.engine.connect() as connection:
            found = connection.exec_driver_sql(f"select version_num from {schema.VERSION_TABLE}")
            assert found.scalar() == schema.REVISIONS[-1]
            # Every view of the newest schema can be read.
            for view in sa.inspect(connection).get_view_names():
                connection.exec_driver_sql(f"select * from {view}").all()


def test_the_oldest_store_is_written_to_like_a_new_one(store_url, tmp_path):
    upgrade(store_url, tmp_path, schema.REVISIONS[0]).dispose()

    def dump(url):
        with open_store(url, tmp_path) as store:
            site = samples.register(store)
            window = samples.window(START, START + 7200)
            site.write(window, site.begin_run("test", "0", "hash"))
            return samples.dump(site)

    samples.assert_same(dump(store_url), dump(f"sqlite:///{tmp_path / 'new.sqlite'}"))


def test_a_migration_that_fails_half_way_leaves_the_old_store(store_url, tmp_path, monkeypatch):
    engine = upgrade(store_url, tmp_path, "0002")
    before = filled(engine, 7)
    columns = {n: [c["name"] for c in sa.inspect(engine).get_columns(n)] for n in before}

    def broken(*_arguments, **_options):
        raise sa.exc.OperationalError("statement", {}, Exception("the disk is full"))

    # Revision 0003 has done its work by then; it goes back with the rest.
    monkeypatch.setattr("alembic.op.create_table", broken)
    with pytest.raises(Exception, match="disk is full"):
        open_store(store_url, tmp_path)
    monkeypatch.undo()
    assert rows(engine, columns) == before
    with engine.connect() as connection:
        found = connection.exec_driver_sql(f"select version_num from {schema.VERSION_TABLE}")
        assert found.scalar() == "0002"
    assert "too_fast" not in columns["tag_quality"]
    engine.dispose()
    open_store(store_url, tmp_path).close()


def test_counts_from_before_the_checks_have_found_nothing(store_url, tmp_path):
    engine = upgrade(store_url, tmp_path, "0002")
    with engine.begin() as connection:
        connection.exec_driver_sql("insert into sites values (1, 'mill', 'Mill', 900, 'UTC', '')")
        connection.exec_driver_sql("insert into tags values (1, 1, 'PT-1')")
        for hour in (START, START + 3600):
            connection.exec_driver_sql(
                f"insert into tag_quality values (1, {hour}, 60, 50, 4, 3, 3, 4, 1, 0, 7)"
            )
    engine.dispose()
    with open_store(store_url, tmp_path) as store:
        found = store.site("mill").tag_quality(START, START + 7200)
        assert found["good"].tolist() == [50, 50]
        for name in ("too_fast", "spike", "out_of_order", "ambiguous", "cells_stuck"):
            assert found[name].tolist() == [0, 0]
        with store.engine.connect() as connection:
            view = connection.exec_driver_sql(
                "select day_utc, readings, spike, cells_stuck from v_tag_quality_by_day"
            )
            assert view.all() == [("2025-06-01", 120, 0, 0)]
