"""config/README.md names every key that a site file may hold."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pytest

import connectors
from monitor.equipment import KINDS
from monitor.flags import Flag, describe
from monitor.site import models

if TYPE_CHECKING:
    import pydantic

README = (Path(__file__).parents[3] / "config" / "README.md").read_text(encoding="utf-8")

TABLES = [
    models.SiteTable,
    models.Store,
    models.DeadState,
    models.Tag,
    models.Meter,
    models.Stream,
    models.Shifts,
    models.Economics,
    models.Drift,
    models.DriftFigure,
    models.Alarms,
    models.Pages,
    models.Daemon,
    models.Notify,
    models.SiteFile,
    *(kind.options for kind in KINDS.values()),
    *(kind.options for kind in connectors.KINDS.values()),
]


def _keys(model: type[pydantic.BaseModel]) -> set[str]:
    return {field.alias or name for name, field in model.model_fields.items()}


@pytest.mark.parametrize("model", TABLES, ids=lambda m: m.__name__)
def test_every_key_of_a_table_is_documented(model):
    missing = {k for k in _keys(model) if f"`{k}`" not in README and f"[{k}]" not in README}
    assert missing <= ({"tag_lists"} if "## tag_lists" in README else set())


@pytest.mark.parametrize("kind", KINDS.values(), ids=lambda k: k.name)
def test_every_kind_and_port_is_documented(kind):
    row = next(line for line in README.splitlines() if line.startswith(f"| `{kind.name}` |"))
    for port in kind.ports:
        assert f"`{port.name}`" in row


@pytest.mark.parametrize("flag", Flag, ids=lambda f: f.name)
def test_every_flag_is_documented_with_its_number(flag):
    assert f"| {flag.value} | {describe(flag)} |" in README


def test_the_documented_defaults_are_the_ones_in_force():
    site = models.SiteTable(id="a", name="b")
    assert (site.interval, site.settle, site.look_back) == (300, 120, 7200)
    assert (site.steady_window, site.steady_limit, site.saturation_band) == (1800, 0.08, 2.0)
    drift = models.Drift()
    assert (drift.reference_length, drift.weight, drift.least_hours) == (14 * 86400, 0.1, 72)
    assert drift.false_alarm_every == 365.25 * 86400
    alarms = models.Alarms()
    assert (alarms.on_delay, alarms.off_delay) == (3 * 3600, 12 * 3600)
