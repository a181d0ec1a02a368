"""The store's fixtures give real, empty databases."""

from __future__ import annotations

import sqlalchemy as sa


def test_a_store_url_is_an_empty_real_database(store_url):
    engine = sa.create_engine(store_url)
    try:
        with engine.connect() as connection:
            assert connection.execute(sa.text("select 1 + 1")).scalar() == 2
        assert sa.inspect(engine).get_table_names() == []
    finally:
        engine.dispose()
