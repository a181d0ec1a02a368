"""Raw rows of any source, brought into the one table that `ReadResult` promises."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from itertools import islice
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from connectors.base import FEW, Example, Mark, Problem, Quality
from connectors.times import NO_TIME, from_microseconds, resolve_doubled_hour

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator, Sequence

    import numpy.typing as npt

__all__ = [
    "ProblemCount",
    "Rows",
    "first_few",
    "join_rows",
    "place_of",
    "settle_doubled_hour",
    "tidy",
]

_LONGEST = 40


@dataclass(frozen=True)
class Rows:
    """Readings in the order they were written, one entry a reading in each array.

    Attributes:
        tag: a code for the tag's name.
        time: [us] UTC; in a doubled hour the earlier candidate.
        value: in the historian's own unit, NaN for none.
        quality: see `Quality`.
        doubled_at: the positions of the rows in a doubled hour, ascending.
        doubled_second: [us] UTC; the later candidate of each of those.
        late_at: the positions of the rows that stand after later ones of their tag, ascending.
    """

    tag: npt.NDArray[np.int32]
    time: npt.NDArray[np.int64]
    value: npt.NDArray[np.float64]
    quality: npt.NDArray[np.uint8]
    doubled_at: npt.NDArray[np.int64]
    doubled_second: npt.NDArray[np.int64]
    late_at: npt.NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, dtype=np.int64))

    def __len__(self) -> int:
        return len(self.time)

    @property
    def nbytes(self) -> int:
        """The memory that the arrays take."""
        arrays = (self.tag, self.time, self.value, self.quality)
        return sum(a.nbytes for a in (*arrays, self.doubled_at, self.doubled_second, self.late_at))

    def keep(self, mask: npt.NDArray[np.bool_]) -> Rows:
        """Return the rows where the mask is true."""
        kept = mask[self.doubled_at]
        position = np.cumsum(mask) - 1
        return Rows(
            self.tag[mask],
            self.time[mask],
            self.value[mask],
            self.quality[mask],
            position[self.doubled_at[kept]],
            self.doubled_second[kept],
            position[self.late_at[mask[self.late_at]]],
        )

    def between(self, low: int, high: int) -> Rows:
        """Return a slice of rows that hold no doubled hour."""
        part = slice(low, high)
        none = self.doubled_at[:0]
        ends = np.searchsorted(self.late_at, [low, high])
        late = self.late_at[ends[0] : ends[1]] - low
        return Rows(
            self.tag[part], self.time[part], self.value[part], self.quality[part], none, none, late
        )


class ProblemCount:
    """Counts problems by what they are; keeps the first few of each."""

    def __init__(self) -> None:
        self._counts: Counter[tuple[str, str]] = Counter()
        self._examples: dict[tuple[str, str], list[Example]] = {}

    def add(self, source: str, what: str, count: int, examples: Iterable[Example] = ()) -> None:
        """Count a problem.

        Args:
            source: the file or table.
            what: what was found and what became of it.
            count: how often; nothing is noted for 0.
            examples: the first of them.
        """
        if not count:
            return
        self._counts[source, what] += int(count)
        kept = self._examples.setdefault((source, what), [])
        kept += list(islice(examples, FEW - len(kept)))

    def problems(self) -> tuple[Problem, ...]:
        """Return what was counted, in the order it was met."""
        return tuple(
            Problem(*key, count, tuple(self._examples[key])) for key, count in self._counts.items()
        )


def first_few(
    rows: npt.NDArray[np.bool_],
    text: Callable[[int], object],
    place: Callable[[int], str] = lambda _: "",
) -> Iterator[Example]:
    """Yield the first few of some rows as examples.

    Args:
        rows: where they are.
        text: what stands in a row, by its position.
        place: where a row stands, by its position.
    """
    for at in np.flatnonzero(rows)[:FEW].tolist():
        yield Example(place(at), str(text(at)).strip()[:_LONGEST])


def place_of(tag: str, time: int) -> str:
    """Say which reading is meant, where a source has no lines to count.

    Args:
        tag: its tag.
        time: [us] UTC; without one it is the tag alone.
    """
    if time == NO_TIME:
        return tag
    moment = pd.Timestamp(time, unit="us", tz="UTC")
    return f"{tag} {moment:%Y-%m-%d %H:%M:%S} UTC"


def join_rows(parts: Sequence[Rows]) -> Rows:
    """Put rows after one another."""
    if len(parts) == 1:
        return parts[0]
    if not parts:
        none = np.zeros(0, dtype=np.int64)
        return Rows(
            none.astype(np.int32),
            none,
            none.astype(np.float64),
            none.astype(np.uint8),
            none,
            none,
        )
    offsets = np.cumsum([0, *(len(part) for part in parts[:-1])])
    return Rows(
        np.concatenate([part.tag for part in parts]),
        np.concatenate([part.time for part in parts]),
        np.concatenate([part.value for part in parts]),
        np.concatenate([part.quality for part in parts]),
        np.concatenate([p.doubled_at + at for p, at in zip(parts, offsets, strict=True)]),
        np.concatenate([part.doubled_second for part in parts]),
        np.concatenate([p.late_at + at for p, at in zip(parts, offsets, strict=True)]),
    )


def settle_doubled_hour(
    rows: Rows, part: npt.NDArray[np.int32]
) -> tuple[Rows, npt.NDArray[np.int64]]:
    """Give each row of a doubled hour its time, by the order of the rows.

    Args:
        rows: rows in the order they were written.
        part: the file of each row.

    Returns:
        The rows with their times settled, and the positions of those whose pass the order does not
        tell: these count as the first pass, are at best uncertain, and keep their candidate.
    """
    at = rows.doubled_at
    if not len(at):
        return rows, at
    passes = resolve_doubled_hour(rows.time[at], rows.tag[at], part[at])
    time, quality = rows.time.copy(), rows.quality.copy()
    later = passes == 1
    time[at[later]] = rows.doubled_second[later]
    unsettled = at[passes < 0]
    quality[unsettled] = np.maximum(quality[unsettled], np.uint8(Quality.UNCERTAIN))
    second = rows.doubled_second[passes < 0]
    settled = Rows(rows.tag, time, rows.value, quality, unsettled, second, rows.late_at)
    return settled, unsettled


def tidy(rows: Rows, tags: Sequence[str]) -> tuple[pd.DataFrame, int]:
    """Sort readings by tag and time, and keep the last one written of each tag and time.

    Args:
        rows: settled rows whose tag is the position in ``tags``; one that still has a second
            candidate time is marked as ambiguous.
        tags: the names asked for, distinct and sorted.

    Returns:
        The table that `ReadResult` promises, and how many readings gave way to a later one.
    """
    # The stable sort of small integers is a radix sort: it costs next to nothing.
    small = rows.tag.astype(np.int16 if len(tags) < np.iinfo(np.int16).max else np.int32)
    order = np.argsort(small, kind="stable")
    tag, time = rows.tag[order], rows.time[order]
    if ((time[1:] < time[:-1]) & (tag[1:] == tag[:-1])).any():
        order = np.argsort(rows.time, kind="stable")
        order = order[np.argsort(small[order], kind="stable")]
        tag, time = rows.tag[order], rows.time[order]
    last = np.ones(len(order), dtype=np.bool_)
    last[:-1] = (tag[1:] != tag[:-1]) | (time[1:] != time[:-1])
    replaced = int(len(last) - last.sum())
    if replaced:
        order, tag, time = order[last], tag[last], time[last]
    marks: dict[str, npt.NDArray[np.uint8]] = {}
    if len(rows.doubled_at) or len(rows.late_at):
        made = np.zeros(len(rows), dtype=np.uint8)
        made[rows.doubled_at] = Mark.AMBIGUOUS_TIME
        made[rows.late_at] |= np.uint8(Mark.OUT_OF_ORDER)
        marks["marks"] = made[order]
    table = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(tag, categories=pd.Index(list(tags), dtype="str")),
            "time": from_microseconds(time),
            "value": rows.value[order],
            "quality": rows.quality[order],
            **marks,
        },
        copy=False,
    )
    return table, replaced
