"""A short run of the demo plant, written once; every test that plants a fault gets a copy."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest
from faulty_site import FaultySite

from monitor.checking import check
from monitor.demo import DemoPlan, copy_site, simulate, write_exports
from monitor.site.load import load_site

if TYPE_CHECKING:
    from pathlib import Path

    from monitor.checking import Checked

# Three days tell whether clocks agree; a reading every five minutes keeps the copies small.
PLAN = DemoPlan(days=3, interval_s=300)


@pytest.fixture(scope="session")
def sound_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("sound") / "site"
    copy_site(folder)
    write_exports(simulate(PLAN), PLAN, folder)
    return folder


@pytest.fixture(scope="session")
def sound(sound_folder: Path) -> Checked:
    """What is told of the site as it is."""
    return check(load_site(sound_folder / "site.toml"))


@pytest.fixture
def faulty(sound_folder: Path, tmp_path: Path) -> FaultySite:
    return FaultySite.copy(sound_folder, tmp_path / "site")
