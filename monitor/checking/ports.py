"""What the ports of each kind of equipment tell of their streams: phase, and falling pressure."""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.base import Item

__all__ = ["PRESSURE_FALLS", "STEAM", "STEAM_PORTS", "WATER", "WATER_PORTS", "falling_pairs"]

PRESSURE_FALLS = frozenset({"flash_vessel", "header", "letdown", "trap_group", "turbine", "vent"})
"""Kinds in which nothing leaves above what enters; a pump may hide in the return of a user."""
WATER_PORTS = frozenset({"blowdown", "condensate", "cooling_in", "cooling_out", "drain", "spray"})
STEAM_PORTS = frozenset({"exhaust", "extraction", "steam"})
"""Ports that mean water, and steam, in whatever kind has them."""

_WATER = {
    "boiler": ("feedwater", "blowdown"),
    "condenser": ("cooling_in", "cooling_out", "condensate"),
    "closed_feedwater_heater": ("feedwater_in", "feedwater_out", "drain"),
    "deaerator": ("water", "feedwater"),
    "letdown": ("spray",),
    "open_feedwater_heater": ("water", "feedwater"),
    "pump": ("inlet", "outlet"),
    "user": ("condensate", "lost"),
}
_STEAM = {
    "accumulator": ("discharge",),
    "boiler": ("steam",),
    "closed_feedwater_heater": ("steam",),
    "condenser": ("steam",),
    "deaerator": ("steam",),
    "flash_vessel": ("steam",),
    "letdown": ("inlet", "outlet"),
    "open_feedwater_heater": ("steam",),
    "turbine": ("inlet", "extraction", "exhaust", "induction"),
    "user": ("steam",),
}
_FALLS = {
    "accumulator": (("charge", "discharge"),),
    "boiler": (("feedwater", "blowdown"), ("feedwater", "steam"), ("blowdown", "steam")),
    "closed_feedwater_heater": (("feedwater_in", "feedwater_out"), ("steam", "drain")),
    "deaerator": (("steam", "feedwater"),),
    "exchanger": (("hot_in", "hot_out"), ("cold_in", "cold_out")),
    "flash_vessel": (("inlet", "steam"),),
    "header": (("inlet", "outlet"),),
    "letdown": (("inlet", "outlet"), ("spray", "outlet")),
    "open_feedwater_heater": (("steam", "feedwater"),),
    "pump": (("outlet", "inlet"),),
    "trap_group": (("inlet", "outlet"),),
    "turbine": (("inlet", "extraction"), ("inlet", "exhaust"), ("extraction", "exhaust")),
    "user": (("steam", "condensate"),),
    "vent": (("inlet", "outlet"),),
}
WATER = {(kind, port): True for kind, ports in _WATER.items() for port in ports}
STEAM = {(kind, port): True for kind, ports in _STEAM.items() for port in ports}
"""Ports of a kind at which only water, or only steam (dry or wet), can run."""


def falling_pairs(item: Item) -> Iterator[tuple[str, str]]:
    """Yield pairs of streams at one piece of equipment whose gauges differ: upper, lower."""
    for upper_port, lower_port in _FALLS.get(item.kind.name, ()):
        for upper in item.ports.get(upper_port, ()):
            for lower in item.ports.get(lower_port, ()):
                if item.differ(upper, lower, "pressure"):
                    yield upper, lower
