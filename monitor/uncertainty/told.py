"""An uncertainty budget told to a person: a row a source, and which instrument to suspect."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from monitor.uncertainty.budget import STATE_OF
from monitor.uncertainty.classes import class_of

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.site.models import Tag
    from monitor.uncertainty.budget import Budget, Uncertainties

__all__ = ["Contribution", "Suspect", "budget_of", "contributions", "excess", "suspect"]

_KILO = 1e-3


@dataclass(frozen=True)
class Contribution:
    """One line of a budget.

    Attributes:
        source: a tag, or ``state of STREAM``.
        instrument_class: as the site file or the default states it.
        by_default: whether it is a default.
        moves: the figure, in its unit, with sign, when the source is higher by its uncertainty.
        share: of the variance, 0 to 1.
    """

    source: str
    instrument_class: str
    by_default: bool
    moves: float
    share: float


@dataclass(frozen=True)
class Suspect:
    """The instrument that most easily explains an impossible figure.

    Attributes:
        source: the tag.
        reads: too ``high`` or too ``low``.
        multiple: of its standard uncertainty that would make the figure possible.
    """

    source: str
    reads: str
    multiple: float

    @property
    def sentence(self) -> str:
        """Say it to a person."""
        return (
            f"{self.source} may read too {self.reads}: {self.multiple:.1f} of its standard "
            "uncertainties would cure it, and no other instrument so few"
        )


def budget_of(found: Uncertainties, subject: str, figure: str) -> tuple[Budget, float] | None:
    """The budget of a stored figure, and what turns it into the figure's unit; None for none.

    Args:
        found: of the window.
        subject: a stream, a piece of equipment, or ``ledger``.
        figure: a column of the store, or a condition figure.
    """
    if (subject, figure) in found.conditions:
        return found.conditions[subject, figure], 1.0
    if figure == "mass_flow_kg_s" and subject in found.mass_flow:
        return found.mass_flow[subject], 1.0
    if figure == "exergy_live_kw" and subject in found.exergy:
        return found.exergy[subject], _KILO
    if figure == "destroyed_live_kw" and subject in found.destroyed:
        return found.destroyed[subject], _KILO
    line = figure.removesuffix("_live_kw")
    if subject == "ledger" and line in found.ledger:
        return found.ledger[line], _KILO
    return None


def contributions(
    budget: Budget, scale: float, tags: Mapping[str, Tag], hour: int
) -> tuple[Contribution, ...]:
    """The lines of a budget in one hour, the largest first; sources without effect left out."""
    ranked = budget.ranked(hour)
    total = math.fsum(move * move for _, move in ranked)
    return tuple(
        Contribution(
            source=source,
            instrument_class=_words(source, tags),
            by_default=source in tags and not tags[source].uncertainty,
            moves=scale * move,
            share=move * move / total if total else math.nan,
        )
        for source, move in ranked
    )


def _words(source: str, tags: Mapping[str, Tag]) -> str:
    if source.startswith(STATE_OF):
        return "near saturation: p and T do not tell the phase"
    found = class_of(tags[source])
    return "not known" if found is None else found.text


def excess(value: float, unit: str) -> float:
    """How far a figure is on the wrong side of what can be: negative where it must rise.

    Destroyed exergy and shares are never negative; shares never above 100 %.
    """
    if value < 0:
        return value
    return value - 100.0 if unit == "%" and value > 100.0 else 0.0  # noqa: PLR2004


def suspect(lines: tuple[Contribution, ...], beyond: float) -> Suspect | None:
    """Which instrument explains a figure that is impossible by ``beyond`` with the least error.

    All instruments count in multiples of their own uncertainty, so it is the largest contribution.
    """
    first = next((line for line in lines if not line.source.startswith(STATE_OF)), None)
    if first is None or not beyond or not math.isfinite(first.moves):
        return None
    # The figure is too high: a reading that raises it is too high, one that lowers it too low.
    reads = "high" if first.moves * beyond > 0 else "low"
    return Suspect(first.source, reads, abs(beyond / first.moves))
