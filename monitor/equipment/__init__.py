"""Every kind of equipment, by the name a site file uses. A new kind is one file and one line here.

Nothing outside this package names a kind: the site loader, the cycle, the store and the pages work
from what `Kind` declares.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.equipment.accumulator import Accumulator
from monitor.equipment.boiler import Boiler
from monitor.equipment.closed_feedwater_heater import ClosedFeedwaterHeater
from monitor.equipment.condenser import Condenser
from monitor.equipment.control_volume import ControlVolume
from monitor.equipment.deaerator import Deaerator
from monitor.equipment.exchanger import Exchanger
from monitor.equipment.flash_vessel import FlashVessel
from monitor.equipment.header import Header
from monitor.equipment.letdown import Letdown
from monitor.equipment.open_feedwater_heater import OpenFeedwaterHeater
from monitor.equipment.pump import Pump
from monitor.equipment.trap_group import TrapGroup
from monitor.equipment.turbine import Turbine
from monitor.equipment.user import User
from monitor.equipment.vent import Vent

if TYPE_CHECKING:
    from monitor.equipment.base import Kind

__all__ = ["KINDS"]

_ALL: tuple[Kind, ...] = (
    Accumulator(),
    Boiler(),
    ClosedFeedwaterHeater(),
    Condenser(),
    ControlVolume(),
    Deaerator(),
    Exchanger(),
    FlashVessel(),
    Header(),
    Letdown(),
    OpenFeedwaterHeater(),
    Pump(),
    TrapGroup(),
    Turbine(),
    User(),
    Vent(),
)

KINDS: dict[str, Kind] = {kind.name: kind for kind in _ALL}
