"""The shift report: one printed page for the hand-over, then the details behind it."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd

from dashboards.figures import ledger_trend
from dashboards.files import LATEST_SHIFT_FILE, PageError, shift_file, write_atomically
from dashboards.overview import ranked_conditions
from dashboards.render import render_page

if TYPE_CHECKING:
    from collections.abc import Sequence

    from dashboards.views import AlarmRow, ConditionRow, LedgerLine, ShiftView

__all__ = ["FirstPage", "first_page", "write_shift"]

# What one A4 page holds; the details hold the rest.
_SENTENCES = 5
_SUMMARY = 850  # characters of all sentences together, in the widest of the usual fonts
_EQUIPMENT = 5
_ALARMS = 4
_MESSAGES = 640  # characters of all messages together
_CONDITIONS = 4
_TAGS = 4

_MOVED = 0.5  # a residual from here on, as a part of its limit, has moved
_START = re.compile(rb'<meta name="shift-start" content="([^"]{10,40})">')
_HEAD = 4096


@dataclass(frozen=True)
class Comparison:
    """A line of the ledger beside the same shifts before."""

    line: LedgerLine
    before: float
    change: float
    """kW; both NaN where there is no earlier shift."""
    share: float
    """The change as a part of what it was."""


@dataclass(frozen=True)
class FirstPage:
    """What of the view the first page shows, and how much it leaves to the details."""

    summary: tuple[str, ...]
    ledger: tuple[Comparison, ...]
    alarms: tuple[AlarmRow, ...]
    equipment: int
    conditions: tuple[ConditionRow, ...]
    moved: int
    tags: int


def write_shift(view: ShiftView, folder: Path) -> Path:
    """Write a shift's report, and again as the latest unless a later shift's is there already.

    Args:
        view: what to draw.
        folder: where the pages are; made if it is not there.

    Returns:
        The report's path.

    Raises:
        PageError: the folder cannot be written, or the shift's name cannot name a file.
    """
    name = shift_file(view.context.start, view.shift_name)
    content = render_page(
        "shift.html",
        view.context,
        view=view,
        first=first_page(view),
        conditions=ranked_conditions(view.conditions),
        trend=ledger_trend(view.ledger_trend),
        started=view.context.start.isoformat(),
    )
    path = write_atomically(Path(folder) / name, content)
    latest = Path(folder) / LATEST_SHIFT_FILE
    if not _is_later(latest, view.context.start):
        write_atomically(latest, content)
    return path


def first_page(view: ShiftView) -> FirstPage:
    """Choose what fits on the first page, the most urgent first."""
    moved = [row for row in ranked_conditions(view.conditions) if _has_moved(row)]
    return FirstPage(
        summary=view.summary[: _whole(view.summary, _SENTENCES, _SUMMARY)],
        ledger=tuple(_comparisons(view)),
        alarms=view.alarms[: _whole([a.message for a in view.alarms], _ALARMS, _MESSAGES)],
        equipment=_EQUIPMENT,
        conditions=tuple(moved[:_CONDITIONS]),
        moved=len(moved),
        tags=_TAGS,
    )


def _whole(texts: Sequence[str], most: int, characters: int) -> int:
    """Count the texts that a page has room for whole: a number cut in two misleads."""
    room = characters
    for count, text in enumerate(texts[:most]):
        room -= len(text)
        if room < 0 and count:
            return count
    return min(len(texts), most)


def _has_moved(row: ConditionRow) -> bool:
    if row.state == "drifting":
        return True
    return row.state == "steady" and row.limit > 0.0 and abs(row.residual) >= _MOVED * row.limit


def _comparisons(view: ShiftView) -> list[Comparison]:
    before = {line.key: line.live_kw for line in view.previous_ledger}
    rows = []
    for line in view.ledger:
        was = before.get(line.key, math.nan)
        change = line.live_kw - was
        share = change / abs(was) if was else math.nan
        rows.append(Comparison(line, was, change, share))
    return rows


def _is_later(latest: Path, start: pd.Timestamp) -> bool:
    """Tell whether the latest report on disk is of a shift that began after ``start``."""
    try:
        with latest.open("rb") as file:
            head = file.read(_HEAD)
    except FileNotFoundError:
        return False
    except OSError as error:
        raise PageError(
            f"cannot read {latest.name} in {latest.parent}: {error.strerror}; "
            "check that this user may read the folder of the pages"
        ) from error
    found = _START.search(head)
    if found is None:
        return False
    try:
        return pd.Timestamp(found[1].decode("ascii")) > start
    except (ValueError, TypeError):
        # Not a time of ours: a page made by other means is replaced.
        return False
