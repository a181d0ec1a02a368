"""A line a source: whether it can be read, from when to when, how much, and how far it lags."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd

from monitor.checking.exports import doubts
from monitor.checking.lines import Figures, Line, Verdict

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from connectors.base import Probe
    from monitor.checking.clocks import Offset
    from monitor.site.load import Site

__all__ = ["FROZEN", "STOPPED", "SourceDay", "clock_words", "source_line", "span"]

STOPPED = 3 * 86400
"""[s] A source this far behind the others has stopped; nearer ones may come once a day."""
_AHEAD = 600
_LONG = 20 * 86400
"""[s] A source that reaches back so far has readings on the day before the newest."""
_ALONE_WORDS = (
    "its newest day stands alone, with nothing in the two days before it: see whether its times "
    "are read with day and month the wrong way round (time_format), or whether exports are missing"
)
_TEN = 10.0
_AHEAD_WORDS = (
    "its newest reading lies {} in the future; check time_zone and time_format, and the clock of "
    "the machine that writes it"
)
FROZEN = "frozen: all its tags repeat"
_FROZEN_WORDS = (
    FROZEN
    + " their last values to the last digit since {} before its newest reading: what feeds it "
    "has stopped while it goes on answering; see to the interface, then backfill the time"
)
_LAG_WORDS = (
    "it lags {} behind the others: figures that need it come so much later; right for an export "
    "that is written once a day, else it hangs. Tags and balances below are those of the newest "
    "day that all sources have"
)


@dataclass(frozen=True)
class SourceDay:
    """What one source has.

    Attributes:
        probe: a quick look at it.
        rows: readings of the site's tags in the newest day.
        alone: nothing stands in the days before that one.
        frozen: how long it has repeated its last values [s], None where they move.
    """

    probe: Probe
    rows: int
    alone: bool = False
    frozen: float | None = None


def source_line(
    site: Site,
    source_id: str,
    seen: SourceDay,
    probes: Mapping[str, Probe],
    shifts: Mapping[str, Offset],
) -> Line:
    """Tell of one source.

    Args:
        site: the site.
        source_id: which.
        seen: what it has.
        probes: what all have, this one among them.
        shifts: sources whose times are off: no lag is counted from those.
    """
    source = next(s for s in site.file.source if s.id == source_id)
    probe, rows = seen.probe, seen.rows
    passed = sum(problem.count for problem in probe.problems)
    if probe.last is None or probe.first is None:
        reason = "; ".join(
            [
                "it holds no reading; check its path, query and time format",
                *_problems(probe, passed),
                *doubts(source, site.folder),
            ]
        )
        return Line("source", source_id, "wrong", f"empty; {probe.detail}", reason)
    offset = shifts.get(source_id)
    trusted = [p.last for i, p in probes.items() if p.last is not None and i not in shifts]
    lag = float((max(trusted, default=probe.last) - probe.last).total_seconds())
    figures: Figures = {
        "tags": len(probe.tags),
        "first": probe.first.isoformat(),
        "last": probe.last.isoformat(),
        "readings_newest_day": rows,
        "lag_s": lag,
        "clock_off_hours": None if offset is None else offset.hours,
        "passed_over": passed,
    }
    found = (
        f"{probe.detail}; {probe.first:%Y-%m-%d %H:%M} to {probe.last:%Y-%m-%d %H:%M} UTC; "
        f"{rows} readings a day; lag {span(lag)}"
    )
    findings = _findings(site, seen, lag, offset)
    told: tuple[Verdict, str] = next(findings, ("ok", ""))
    if told[0] == "ok" and probe.problems:
        told = ("look", _problems(probe, passed)[0])
    elif probe.problems:
        told = (told[0], "; ".join([told[1], *_problems(probe, passed)]))
    if told[0] != "ok":
        told = (told[0], "; ".join([told[1], *doubts(source, site.folder)]))
    return Line("source", source_id, told[0], found, told[1], figures)


def _findings(
    site: Site, seen: SourceDay, lag: float, offset: Offset | None
) -> Iterator[tuple[Verdict, str]]:
    """What is not as it should be with a source that holds readings, the gravest first."""
    first, last = seen.probe.first, seen.probe.last
    if first is None or last is None:
        return
    ahead = (last - pd.Timestamp.now(tz="UTC")).total_seconds()
    if offset is not None:
        yield "wrong", clock_words(offset)
    if ahead > _AHEAD:
        yield "wrong", _AHEAD_WORDS.format(span(ahead))
    if lag > STOPPED:
        yield "wrong", f"it stopped {span(lag)} before the others"
    if seen.frozen is not None:
        yield "wrong", _FROZEN_WORDS.format(span(seen.frozen))
    if seen.rows == 0:
        yield "wrong", "none of the site's tags has a reading in the newest day of data"
    if lag > site.file.site.look_back and offset is None:
        yield "look", _LAG_WORDS.format(span(lag))
    if seen.alone and (last - first).total_seconds() > _LONG:
        yield "look", _ALONE_WORDS


def clock_words(offset: Offset) -> str:
    """Say how a source's clock is off, and what would set it right."""
    way = "late" if offset.hours > 0 else "early"
    advice = offset.advice or "check its time_zone"
    other = f"; or those of {' or '.join(offset.others)} are" if offset.others else ""
    return (
        f"its times look {abs(offset.hours):g} h too {way}: what moves together in the plant comes "
        f"that much {'later' if offset.hours > 0 else 'earlier'} here than in the other sources"
        f"{other}; {advice}"
    )


def _problems(probe: Probe, passed: int) -> list[str]:
    if not probe.problems:
        return []
    worst = max(probe.problems, key=lambda problem: problem.count)
    return [f"passed over {passed}, most: {worst} ({worst.source})"]


def span(seconds: float) -> str:
    """Write a time in the unit that a person would take."""
    for size, unit in ((86400, "d"), (3600, "h"), (60, "min")):
        if abs(seconds) >= 2 * size:
            amount = seconds / size
            return f"{amount:.0f} {unit}" if amount >= _TEN else f"{amount:.2g} {unit}"
    return f"{seconds:.0f} s"
