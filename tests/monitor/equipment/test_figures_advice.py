from __future__ import annotations

import pytest

from monitor.drift.rules import figure_rules
from monitor.equipment import KINDS
from monitor.equipment.base import Item
from monitor.site.models import Drift


@pytest.mark.parametrize("kind", KINDS.values(), ids=lambda k: k.name)
def test_every_figure_that_can_raise_an_alarm_says_what_to_look_at_first(kind):
    options = {
        "accumulator": {"volume": "60 m^3", "level": "L", "pressure": "P"},
        "vent": {"position": "Z"},
        "letdown": {"position": "Z"},
    }.get(kind.name, {})
    ports = {port.name: ("a", "b")[: port.most] for port in kind.ports}
    item = Item("it", "it", kind, ports, kind.options.model_validate(options))
    for rule in figure_rules([item], Drift()):
        assert rule.advice.endswith("."), rule.figure
