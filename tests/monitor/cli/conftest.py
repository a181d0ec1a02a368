"""Run commands in this process, on a plant that was computed once."""

from __future__ import annotations

import json
import shutil
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import pytest
from typer.testing import CliRunner

from monitor.cli import app

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

FROM, TO = "2026-01-10T00:00Z", "2026-01-16T00:00Z"


@dataclass(frozen=True)
class Ran:
    """How a command ended, and what it wrote."""

    code: int
    out: str
    err: str

    def json(self) -> Any:
        return json.loads(self.out)


@pytest.fixture(scope="session")
def lostwork() -> Callable[..., Ran]:
    """Run a command; a traceback, or a fault of the program, never passes a test."""

    def run(*arguments: object) -> Ran:
        result = CliRunner().invoke(app, [str(a) for a in arguments], prog_name="lostwork")
        if result.exception is not None and not isinstance(result.exception, SystemExit):
            raise result.exception
        assert "Traceback" not in result.output
        return Ran(result.exit_code, result.stdout, result.stderr)

    return run


@pytest.fixture(scope="session")
def _computed(tmp_path_factory, make_plant, lostwork):
    plant = make_plant(tmp_path_factory.mktemp("computed"), days=6.0, worse_after_days=4.0)
    ran = lostwork("backfill", plant.path, "--from", FROM, "--to", TO, "--workers", "1")
    assert ran.code == 0, ran.err
    return plant


@pytest.fixture
def computed(_computed, tmp_path: Path):
    """A copy, for one test alone, of a plant whose six days are computed and judged."""
    folder = tmp_path / "site"
    shutil.copytree(_computed.folder, folder)
    return replace(_computed, folder=folder)


@pytest.fixture
def plant(make_plant, tmp_path: Path):
    """A plant of two days that nothing was computed of."""
    return make_plant(tmp_path / "site")
