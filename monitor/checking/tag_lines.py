"""A line a tag: found, unit, last value, readings an hour, good share, within range, stuck."""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from connectors.base import Quality
from monitor.checking.exports import doubts, texts_of
from monitor.checking.lines import Figures, Line, Verdict
from monitor.checking.source_lines import span
from monitor.readings.condition import RANGE_ABOVE, RANGE_BELOW, at_rest

if TYPE_CHECKING:
    from collections.abc import Iterator

    from connectors.base import Probe
    from monitor.equipment.base import FloatArray
    from monitor.site.load import Site
    from monitor.site.tags import Tag

__all__ = ["TagDay", "out_of_range", "tag_line", "unreadable"]

HOUR = 3600
LEAST_GOOD = 0.9
"""Share of good readings under which a tag is worth a look."""
_UNREADABLE = 0.5
"""Share of cells without a number from which the column, not the instrument, is in doubt."""
_STUCK_WRONG, _STUCK_LOOK = 0.4, 0.1
_UNCOVERED = 0.15
"""Share of the day without a value that an outage of some hours leaves, and no more."""
_SILENT = 3600.0
"""[s] A tag that ends so long before its source, and longer than its hold, has gone silent."""


@dataclass(frozen=True)
class TagDay:
    """What one tag's source has of it.

    Attributes:
        part: the newest day's readings, None for none.
        probe: what the source has.
        start, end: of the day, UTC s.
        stuck: share of the day's cells in which it stood still while its neighbours moved.
    """

    part: pd.DataFrame | None
    probe: Probe
    start: int
    end: int
    stuck: float


def tag_line(site: Site, tag: Tag, seen: TagDay) -> Line:
    """Tell of one tag."""
    part = seen.part
    if part is None or part.empty:
        return _absent(tag, seen.probe)
    value = part["value"].to_numpy(dtype=np.float64)
    quality = part["quality"].to_numpy()
    finite = np.isfinite(value)
    good = finite & (quality == Quality.GOOD)
    outside = finite & _outside(value, tag)
    last = value[finite][-1] if finite.any() else float("nan")
    hours = (seen.end - seen.start) / HOUR
    gap = float(part["time"].diff().max().total_seconds()) if len(part) > 1 else hours * HOUR
    figures: Figures = {
        "unit": tag.unit.text,
        "last": float(last),
        "readings_per_hour": len(part) / hours,
        "good_share": float(good.mean()),
        "number_share": float(finite.mean()),
        "outside_share": float(outside.mean()),
        "stuck_share": seen.stuck,
        "longest_gap_s": gap,
        "begins_after_s": float(part["time"].iloc[0].timestamp() - seen.start),
        "uncovered_share": _uncovered(part, tag, seen),
        "silent_s": _silent(part, value, quality, seen.end),
    }
    found = (
        f"{last:.4g} {tag.unit.text}; {len(part) / hours:.3g} readings/h; "
        f"{100 * good.mean():.0f} % good"
    )
    findings = _findings(site, tag, value[finite & ~outside], figures)
    verdict, reason = next(findings, ("ok", ""))
    return Line("tag", tag.name, verdict, found, reason, figures)


def out_of_range(line: Line) -> bool:
    """Whether a tag delivers numbers, but none within its range: its unit may be another."""
    return line.verdict == "wrong" and line.figures.get("outside_share") == 1.0


def _uncovered(part: pd.DataFrame, tag: Tag, seen: TagDay) -> float:
    """Share of the day that lies further behind a reading than the tag's hold."""
    seconds = pd.DatetimeIndex(part["time"]).as_unit("us").asi8 / 1e6
    gaps = np.diff(np.concatenate([[float(seen.start)], seconds, [float(seen.end)]]))
    return float(np.maximum(gaps - tag.hold, 0.0).sum() / (seen.end - seen.start))


def unreadable(line: Line) -> bool:
    """Whether most of a tag's cells hold no number."""
    return float(str(line.figures.get("number_share", 1.0))) < _UNREADABLE


def _silent(
    part: pd.DataFrame,
    value: FloatArray,
    quality: np.ndarray[tuple[int], np.dtype[np.uint8]],
    end: int,
) -> float:
    """How long before the day's end the last usable reading came [s]."""
    usable = np.isfinite(value) & (quality != Quality.BAD)
    if not usable.any():
        return float("inf")
    last: pd.Timestamp = part["time"].iloc[int(np.flatnonzero(usable)[-1])]
    return float(end - last.timestamp())


def _findings(
    site: Site, tag: Tag, usable: FloatArray, figures: Figures
) -> Iterator[tuple[Verdict, str]]:
    """What is not as it should be with a tag, the gravest first."""
    outside, good, numbers, silent, gap, uncovered = (
        float(str(figures[key]))
        for key in (
            "outside_share",
            "good_share",
            "number_share",
            "silent_s",
            "longest_gap_s",
            "uncovered_share",
        )
    )
    if numbers < _UNREADABLE:
        yield "wrong", _unreadable(site, tag, numbers)
    if not usable.size:
        low, high = tag.range or (0, 0)
        yield (
            "wrong",
            (f"all outside its range {low:g} to {high:g} {tag.unit.text}; is the unit right?"),
        )
        return
    yield from _silence(tag, silent)
    stuck = _still(tag, usable, float(str(figures["stuck_share"])))
    if stuck is not None and stuck[0] == "wrong":
        yield stuck
    if outside > 1 - LEAST_GOOD:
        yield "look", f"{100 * outside:.0f} % of its values are outside the instrument's range"
    if numbers < LEAST_GOOD:
        yield "look", _unreadable(site, tag, numbers)
    if good < LEAST_GOOD:
        yield "look", "the historian calls many of its readings bad or uncertain"
    if stuck is not None:
        yield stuck
    if uncovered > _UNCOVERED and gap <= tag.hold:
        # No longer hold would reach back before the first reading.
        begins = float(str(figures["begins_after_s"])) / HOUR
        yield "look", f"its readings begin {begins:.1f} h after the day looked at does"
    elif uncovered > _UNCOVERED:
        yield (
            "look",
            (
                f"its hold of {tag.hold / 60:.0f} min leaves {100 * uncovered:.0f} % of the day "
                f"without a value, longest gap {gap / 60:.0f} min; a historian that reports by "
                "exception needs a longer hold"
            ),
        )


def _silence(tag: Tag, silent: float) -> Iterator[tuple[Verdict, str]]:
    if not np.isfinite(silent):
        yield "wrong", "no value can be used; the historian calls all of them bad"
    elif silent > max(tag.hold, _SILENT):
        yield (
            "wrong",
            f"dead: no usable reading in the last {span(silent)}; see instrument and export",
        )


def _still(tag: Tag, usable: FloatArray, stuck: float) -> tuple[Verdict, str] | None:
    """Whether it stands still; at rest (nothing flows, a valve is shut) that says nothing."""
    if stuck >= _STUCK_LOOK:
        verdict: Verdict = "wrong" if stuck >= _STUCK_WRONG else "look"
        return verdict, (
            f"stuck: it stood still for {span(stuck * 86400 + tag.stuck_seconds)} while its "
            "neighbours moved; frozen transmitter, or a value set by hand"
        )
    least, most = float(usable.min()), float(usable.max())
    resting = bool(at_rest(np.array([least]), np.array([most]), tag)[0])
    if usable.size > 1 and most == least and not resting:
        return "look", "it did not move all day; frozen, or not in service?"
    return None


def _unreadable(site: Site, tag: Tag, numbers: float) -> str:
    source = next(s for s in site.file.source if s.id == tag.source)
    texts = texts_of(source, site.folder, tag.historian_name)
    shown = f" ({', '.join(repr(text[:40]) for text in texts)})" if texts else ""
    of_all = "its cells hold no numbers" if numbers == 0 else (
        f"{100 * (1 - numbers):.0f} % of its cells hold no number"
    )  # fmt: skip
    told = [f"unreadable: {of_all}{shown}", *doubts(source, site.folder)]
    if len(told) == 1:
        told.append(
            "the export writes words or another number format there: put digital states into "
            "states and words for no value into bad_words, or have the column exported as numbers"
        )
    return "; ".join(told)


def _outside(value: FloatArray, tag: Tag) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    if tag.range is None:
        return np.zeros(value.shape, dtype=np.bool_)
    low, high = tag.range
    span_ = high - low
    return np.asarray((value < low - RANGE_BELOW * span_) | (value > high + RANGE_ABOVE * span_))


def _absent(tag: Tag, probe: Probe) -> Line:
    name = tag.historian_name
    if name in probe.tags:
        reason = f"dead: source '{tag.source}' knows it, but has no reading of it in the newest day"
        return Line("tag", tag.name, "wrong", "no readings", reason)
    near = difflib.get_close_matches(name, probe.tags, n=1)
    hint = f"did you mean '{near[0]}'?" if near else "check its source and source_name"
    reason = f"source '{tag.source}' has no tag '{name}'; {hint}"
    return Line("tag", tag.name, "wrong", "not found", reason)
