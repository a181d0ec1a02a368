"""What a check tells: a line a thing, and the causes that explain several of them."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Mapping

__all__ = [
    "VERDICTS",
    "Cause",
    "Checked",
    "Figures",
    "Line",
    "LineKind",
    "Verdict",
    "number",
]

Verdict = Literal["ok", "look", "wrong"]
LineKind = Literal["store", "source", "tag", "stream", "equipment"]
Figures = dict[str, float | int | str | None]
VERDICTS: tuple[Verdict, ...] = ("ok", "look", "wrong")


@dataclass(frozen=True)
class Line:
    """What was found about one thing.

    Attributes:
        kind: store, source, tag, stream or equipment.
        subject: its id or name.
        verdict: ``ok``, ``look`` (worth a person's eyes) or ``wrong`` (figures would be wrong).
        found: a few words with numbers and units.
        reason: why it is not ok, and what to do; empty when it is.
        figures: the numbers, for a machine.
    """

    kind: LineKind
    subject: str
    verdict: Verdict
    found: str
    reason: str = ""
    figures: Mapping[str, float | int | str | None] = field(default_factory=dict)


@dataclass(frozen=True)
class Cause:
    """One fault that explains what lines tell.

    Attributes:
        kind: ``tag`` or ``source``.
        subject: what to put right.
        reason: what it looks like.
        verdict: ``look`` or ``wrong``, that of the subject's own line at least.
        guess: whether it is inferred from what the readings contradict, not seen directly.
        explains: the lines that it explains, as (kind, subject), without its own.
        others: tags or sources that would explain as much.
    """

    kind: Literal["tag", "source"]
    subject: str
    reason: str
    verdict: Verdict = "wrong"
    guess: bool = False
    explains: tuple[tuple[str, str], ...] = ()
    others: tuple[str, ...] = ()


@dataclass(frozen=True)
class Checked:
    """A whole check.

    Attributes:
        causes: the likeliest faults, the one to put right first in front.
        lines: store, sources, tags, streams, equipment, in this order.
    """

    causes: tuple[Cause, ...]
    lines: tuple[Line, ...]


def number(value: float) -> float | None:
    """Return a number that JSON can hold, None for one that is not finite."""
    return float(value) if np.isfinite(value) else None
