"""Every kind of equipment, by the name a site file uses. A new kind is one file and one line here.

Nothing outside this package names a kind: the site loader, the cycle, the store and the pages work
from what `Kind` declares.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.equipment.accumulator import Accumulator
from monitor.equipment.boiler import Boiler
from monitor.equipment.condenser import Condenser
from monitor.equipment.control_volume import ControlVolume
from monitor.equipment.header import Header
from monitor.equipment.letdown import Letdown
from monitor.equipment.pump import Pump
from monitor.equipment.turbine import Turbine
from monitor.equipment.user import User

if TYPE_CHECKING:
    from monitor.equipment.base import Kind

__all__ = ["KINDS"]

_ALL: tuple[Kind, ...] = (
    Accumulator(),
    Boiler(),
    Condenser(),
    ControlVolume(),
    Header(),
    Letdown(),
    Pump(),
    Turbine(),
    User(),
)

KINDS: dict[str, Kind] = {kind.name: kind for kind in _ALL}
