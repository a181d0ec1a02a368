"""An open, empty store on each database, and the small site in it."""

from __future__ import annotations

import pytest
import store_samples as samples

from monitor.store.open import open_store


@pytest.fixture
def store(store_url, tmp_path):
    with open_store(store_url, tmp_path) as opened:
        yield opened


@pytest.fixture
def site(store):
    return samples.register(store)


@pytest.fixture
def run_id(site):
    return site.begin_run("test", "0", "hash")
