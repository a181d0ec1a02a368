"""A valve that should be closed: its position, and what passes it all the same.

Kinds with a valve of their own (let-down, vent) share these keys and this figure. The flow meter
tells what passes; a meter's error about zero is its own, so the figure is judged on a baseline.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, cast

import numpy as np

from monitor.equipment.base import ConditionFigure, Figure, Options, measured
from monitor.site.models import Reference
from monitor.site.units import Quantity

if TYPE_CHECKING:
    from monitor.equipment.base import Drawn, FloatArray, Item

__all__ = ["ValveOptions", "passing_figure", "passing_flow"]


class ValveOptions(Options):
    """Keys of a valve whose position the site may have.

    Attributes:
        position: tag of the valve's position.
        closed_below: position under which the valve counts as closed [0 to 1].
    """

    position: Reference | None = None
    closed_below: Annotated[float, measured(Quantity.FRACTION)] = 0.02

    def signals(self) -> dict[str, tuple[Reference, Quantity]]:
        """The valve position, when the site has one."""
        if self.position is None:
            return {}
        return {"position": (self.position, Quantity.FRACTION)}

    def is_closed(self, position: FloatArray) -> np.ndarray[tuple[int, ...], np.dtype[np.bool_]]:
        """Where the valve counts as closed; an absent position does not."""
        return np.asarray(position < self.closed_below)


def passing_figure(item: Item, advice: str) -> tuple[Figure, ...]:
    """The passing flow, where the site file gives the valve's position."""
    if cast("ValveOptions", item.options).position is None:
        return ()
    return (
        Figure(
            "passing_flow",
            "passing flow when closed",
            "t/h",
            "high",
            0.5,
            needs_load=False,
            follows_load=False,
            advice=advice,
        ),
    )


def passing_flow(drawn: Drawn, flow: FloatArray) -> dict[str, ConditionFigure]:
    """Flow [kg/s] through the valve while it is closed, in t/h; nothing without a position."""
    position = drawn.signals.get("position")
    if position is None:
        return {}
    closed = cast("ValveOptions", drawn.item.options).is_closed(position.value)
    passing = np.where(closed, flow * 3.6, np.nan)
    return {"passing_flow": ConditionFigure(passing, np.ones_like(flow), position.flag)}
