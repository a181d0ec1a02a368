"""A valve that should be closed: its position, and what passes it all the same.

Kinds with a valve of their own (let-down, vent) share these keys and this figure. The flow meter
tells what passes; a meter's error about zero is its own, so the figure is judged on a baseline.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, cast

import numpy as np

from monitor.equipment.base import ConditionFigure, Figure, Options, measured
from monitor.equipment.working import Working
from monitor.site.models import Reference
from monitor.site.units import Quantity

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.base import Drawn, FloatArray, Item
    from monitor.equipment.working import AtHand

__all__ = ["ValveOptions", "passing_figure", "passing_flow", "passing_working"]


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


def passing_working(at: AtHand) -> Iterator[Working]:
    """The step to the passing flow; none while the valve is open."""
    position, limit = (
        at.signals["position"].value,
        cast("ValveOptions", at.item.options).closed_below,
    )
    if position < limit:
        flow = at.only("inlet")["mass_flow_kg_s"]
        yield Working(
            "passing flow when closed",
            "3.6 m while the position is below closed_below",
            f"3.6 * {flow:.6f}; position {100 * position:.3f} % < {100 * limit:g} %",
            3.6 * flow,
            "t/h",
            is_figure=True,
        )
