"""The uncertainty budget of figures: what each source moves them by.

u_c^2 = sum (c_i u_i)^2 over the sources of a figure, JCGM 100:2008 (GUM), eq. 10. A tag that
reaches a figure along several ways (a header's gauge, a flow found from a balance) is one source:
its ways add up with their signs before they are squared.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.equipment.base import FloatArray

__all__ = ["COVERAGE", "STATE_OF", "Budget", "Hourly", "Uncertainties"]

COVERAGE = 2.0
"""The coverage factor k of what people are shown: 95 % of a normal distribution (GUM, 6.3.3)."""

STATE_OF = "state of "
"""How the source is called that p and T beside saturation are: they do not tell the phase."""


@dataclass(frozen=True)
class Budget:
    """What each source moves one figure by, when it reads higher by its standard uncertainty.

    Attributes:
        sources: tags, and ``state of STREAM`` where p and T do not fix one.
        moves: in the figure's unit, with sign, shape (sources, n).
    """

    sources: tuple[str, ...]
    moves: FloatArray

    @property
    def standard(self) -> FloatArray:
        """Combined standard uncertainty, shape (n,); NaN where a source's class is not known."""
        return np.asarray(np.sqrt(np.add.reduce(np.square(self.moves), axis=0)))

    def ranked(self, cell: int) -> list[tuple[str, float]]:
        """Sources and their moves in one cell, the largest first, those without any left out."""
        moves = self.moves[:, cell]
        order = np.argsort(-np.abs(moves), kind="stable")
        return [(self.sources[i], float(moves[i])) for i in order if moves[i]]


@dataclass(frozen=True)
class Hourly:
    """How the cells in which uncertainties are worked out stand for all cells of a window.

    Attributes:
        cells: indices of the first cell of each hour among those kept, shape (n,); a single hour
            stands twice, since numpy sums a single column in another order than several.
        hours: how many hours there are.
        per_hour: cells an hour.
        kept: all cells, the lead-in in front.
        count: cells of the window itself.
    """

    cells: np.ndarray[tuple[int], np.dtype[np.int64]]
    hours: int
    per_hour: int
    kept: int
    count: int

    @classmethod
    def of(cls, kept: int, count: int, per_hour: int) -> Hourly:
        """The first cell of each hour of a window that begins on one."""
        first = np.arange(kept - count, kept, per_hour, dtype=np.int64)
        cells = np.repeat(first, 2) if len(first) == 1 else first
        return cls(cells, len(first), per_hour, kept, count)

    def by_cell(self, values: FloatArray) -> FloatArray:
        """Give each cell its hour's value; NaN in the lead-in."""
        spread = np.repeat(values[: self.hours], self.per_hour)[: self.count]
        return np.concatenate([np.full(self.kept - self.count, np.nan), spread])


@dataclass(frozen=True)
class Uncertainties:
    """The budgets of one window's figures.

    Attributes:
        hourly: which cells they are of.
        mass_flow, exergy: of streams [kg/s], [W at the live dead state].
        destroyed: of equipment [W, live].
        conditions: by equipment and figure, in the figure's unit.
        ledger: by line: supplied, used, lost, destroyed, imbalance [W, live].
        by_default: for each piece of equipment the tags whose class is a default.
    """

    hourly: Hourly
    mass_flow: Mapping[str, Budget] = field(default_factory=dict)
    exergy: Mapping[str, Budget] = field(default_factory=dict)
    destroyed: Mapping[str, Budget] = field(default_factory=dict)
    conditions: Mapping[tuple[str, str], Budget] = field(default_factory=dict)
    ledger: Mapping[str, Budget] = field(default_factory=dict)
    by_default: Mapping[str, tuple[str, ...]] = field(default_factory=dict)

    def standard(self, budget: Budget) -> FloatArray:
        """The combined standard uncertainty in every kept cell, NaN in the lead-in."""
        return self.hourly.by_cell(budget.standard)
