"""Small marks inside tables, as positions in per cent: the bullet of a residual, a quality bar."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from dashboards.theme import COLOURS

if TYPE_CHECKING:
    from dashboards.views import ConditionRow, QualityRow

__all__ = ["Bullet", "Segment", "bullet", "matters", "quality_segments"]

_REACH = 2.0  # the bullet's scale ends at twice the limit


@dataclass(frozen=True)
class Bullet:
    """A residual against its limits on a scale of 0 to 100, expected in the middle."""

    low: float
    high: float
    """Where the limits lie."""
    start: float
    width: float
    """The bar from expected to the residual."""
    colour: str
    beyond: str
    """``left`` or ``right`` when the residual lies off the scale, else empty."""
    worse_low: bool
    worse_high: bool
    words: str


def bullet(row: ConditionRow) -> Bullet | None:
    """Place a residual against its limit; None where either is missing."""
    if not (math.isfinite(row.residual) and math.isfinite(row.limit)) or row.limit <= 0.0:
        return None
    share = row.residual / row.limit
    clipped = min(max(share, -_REACH), _REACH)
    at = 50.0 + clipped / _REACH * 50.0
    half = 50.0 / _REACH
    beyond = "" if abs(share) <= _REACH else ("right" if share > 0 else "left")
    return Bullet(
        low=50.0 - half,
        high=50.0 + half,
        start=min(50.0, at),
        width=abs(at - 50.0),
        colour=COLOURS["vermilion"] if row.state == "drifting" else COLOURS["blue"],
        beyond=beyond,
        worse_low=row.worse in {"low", "both"},
        worse_high=row.worse in {"high", "both"},
        words=f"residual is {abs(share):.2g} times the limit, {'above' if share > 0 else 'below'}",
    )


def matters(row: ConditionRow) -> float:
    """Return the change that sets a row's digits: the stated smallest, else the limit, else 0.

    A figure that nobody judges stands alone, without an expected value: a digit more is of use.
    """
    if row.smallest_change > 0.0:
        return row.smallest_change / (10.0 if row.state == "not judged" else 1.0)
    return row.limit if math.isfinite(row.limit) and row.limit > 0.0 else 0.0


@dataclass(frozen=True)
class Segment:
    """One part of a stacked bar, 0 to 100."""

    start: float
    width: float
    colour: str
    word: str


_QUALITY = (
    ("good", "blue"),
    ("uncertain", "yellow"),
    ("bad", "vermilion"),
    ("missing", "faint"),
)


def quality_segments(row: QualityRow) -> tuple[Segment, ...]:
    """Stack a tag's shares from good to missing; more than the whole is scaled to it."""
    shares = [max(_finite(getattr(row, name)), 0.0) for name, _ in _QUALITY]
    whole = max(sum(shares), 1.0)
    segments: list[Segment] = []
    start = 0.0
    for (name, colour), share in zip(_QUALITY, shares, strict=True):
        width = share / whole * 100.0
        if width > 0.0:
            segments.append(Segment(start, width, COLOURS[colour], name))
        start += width
    return tuple(segments)


def _finite(value: float) -> float:
    return value if math.isfinite(value) else 0.0
