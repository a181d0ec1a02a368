"""What the columns of an export hold: times, tags, values, quality, units."""

from __future__ import annotations

import itertools
import re
import warnings
from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pyarrow as pa

from connectors.quality import BAD_VALUE_WORDS, QualityOptions, QualityWords, opc_classic, opc_ua
from connectors.times import DAY, NO_TIME, TimeReader

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    import numpy.typing as npt

__all__ = ["Columns", "TimeColumns", "columns_of", "marks_of", "time_columns"]

_SAMPLE = 200
_MOST = 0.8
_EARLIEST, _LATEST = 7_300 * DAY, 29_200 * DAY  # 1990 to 2050: beyond, a number is no time
_CLOCK = re.compile(r"\d{1,2}:\d{2}(:\d{2}([.,]\d+)?)?( ?[AaPp]\.?[Mm]\.?)?")
_PLAIN_NUMBER = re.compile(r"[+-]?\d+([.,]\d*)?")
_NUMBER = re.compile(r"[+-]?[\d.,'\u00a0\u202f ]*\d[\d.,]*([eE][+-]?\d+)?")
_OFFSET = re.compile(r".*([Zz]|[+-]\d\d:?\d\d)")
_GROUPED = re.compile(r"[+-]?\d{1,3}(?:(['\u00a0\u202f ])\d{3})+([.,]\d*)?")

_NAMED_TIME = re.compile(r"time|date|zeit|datum|stamp|uhr|heure|hora|fecha|ora|t$", re.IGNORECASE)
_NAMED_TAG = re.compile(
    r"tag|name|point|item|sensor|variable|signal|stelle|kks|channel|parameter|instrument|measur",
    re.IGNORECASE,
)
_NAMED_VALUE = re.compile(r"val|wert|reading|result|betrag|amount|mean|avg", re.IGNORECASE)
_NAMED_QUALITY = re.compile(r"qual|status|güte|guete|conf|valid|flag", re.IGNORECASE)
_NAMED_UNIT = re.compile(r"^(units?|einheit|eu|uom|eng.*units?|unité|unidad)$", re.IGNORECASE)

_WORDS = ("iso", "epoch_s", "epoch_ms", "epoch_us", "serial_1900", "day_first", "month_first")
_DATES = ("%d-%b-%y", "%d-%b-%Y", "%d %b %Y", "%d %B %Y", "%b %d, %Y", "%Y/%m/%d", "%Y.%m.%d",
          "%Y%m%d")  # fmt: skip
_CLOCKS = ("%H:%M:%S", "%H:%M:%S.%f", "%H:%M:%S,%f", "%H:%M", "%I:%M:%S %p", "%I:%M:%S.%f %p",
           "%I:%M %p", "%H%M%S")  # fmt: skip


@dataclass(frozen=True)
class TimeColumns:
    """The columns of times.

    Attributes:
        at: their places, one or two.
        time_format: how they are written.
        has_offset: the times say where they stand to UTC, or are counted from a moment of it.
        doubt: what else they might be, empty for nothing.
    """

    at: tuple[int, ...]
    time_format: str
    has_offset: bool
    doubt: str

    def in_row(self, row: Sequence[str]) -> bool:
        """Say whether a row has a time."""
        text = " ".join(row[at] for at in self.at)
        return bool((_read(self.time_format, [text]) != NO_TIME).all())


@dataclass(frozen=True)
class Columns:
    """What the other columns are.

    Attributes:
        layout: ``long`` or ``wide``.
        tag, value, quality, unit: their places in layout ``long``, None for none.
        quality_kind: how the quality is written, empty for not known.
        words: words in value cells that are in no list, with their counts.
    """

    layout: str
    tag: int | None
    value: int | None
    quality: int | None
    unit: int | None
    quality_kind: str
    words: tuple[tuple[str, int], ...]


def time_columns(rows: Sequence[tuple[str, ...]]) -> TimeColumns | None:
    """Find the column of times, or those of dates and of times of day, None for none.

    Args:
        rows: lines as wide as most; a few at the start may be headers, units or junk.
    """
    # The later half: headers and rows of units are behind, a single row of readings is in it.
    sample = list(rows[-max(len(rows) // 2, 1) :])[-_SAMPLE:]
    width = len(rows[0])
    for at in range(width):
        cells = [row[at] for row in sample if row[at]]
        if not cells:
            continue
        numeric = sum(bool(_PLAIN_NUMBER.fullmatch(cell)) for cell in cells) > _MOST * len(cells)
        named = any(_NAMED_TIME.search(row[at]) for row in rows[:10])
        if numeric and at > 0 and not named:
            continue
        clock = None if numeric else _clock(sample, at)
        texts = cells if clock is None else [f"{r[at]} {r[clock]}" for r in sample if r[at]]
        found = _format(texts, numeric=numeric)
        if found is not None:
            places = (at,) if clock is None else (at, clock)
            counted = found[0].startswith("epoch")
            offset = counted or all(_OFFSET.fullmatch(t) and ":" in t for t in texts)
            return TimeColumns(places, found[0], offset, found[1])
    return None


def marks_of(rows: Sequence[tuple[str, ...]], skip: Sequence[int]) -> tuple[str, str, str]:
    """Return the decimal mark, the thousands mark and what is doubtful about them.

    Args:
        rows: rows of readings.
        skip: columns that are no numbers.
    """
    cells = [
        cell for row in rows for at, cell in enumerate(row) if at not in skip and _is_number(cell)
    ]
    grouped = [m for m in map(_GROUPED.fullmatch, cells) if m]
    if grouped:
        decimals = {m[2][0] for m in grouped if m[2]} or {"."}
        mark = grouped[0][1]
        return min(decimals), "'" if mark == "'" else "space", ""
    both = [cell for cell in cells if "," in cell and "." in cell]
    if both:
        last = max(",.", key=both[0].rfind)
        return last, "," if last == "." else ".", ""
    for mark, other in ((",", "."), (".", ",")):
        twice = [cell for cell in cells if cell.count(mark) > 1]
        if twice:
            return other, mark, ""
    commas = [cell for cell in cells if "," in cell]
    if not commas:
        return ".", "", ""
    threes = all(re.fullmatch(r"[+-]?\d{1,3},\d{3}", cell) for cell in commas)
    doubt = "are commas decimal marks, or between thousands?" if threes else ""
    return ",", "", doubt


def columns_of(
    header: Sequence[str], rows: Sequence[tuple[str, ...]], times: TimeColumns
) -> Columns:
    """Say what the columns beside the times are."""
    others = [at for at in range(len(header)) if at not in times.at and _cells(rows, at)]
    unit = next((at for at in others if _NAMED_UNIT.search(header[at])), None)
    quality = _quality(header, rows, [at for at in others if at != unit])
    left = [at for at in others if at not in {unit, quality}]
    value_like = [at for at in left if _share(rows, at) > 1 - _MOST]
    texts = [at for at in left if _share(rows, at) <= 1 - _MOST]
    tag = _tag(header, rows, times, texts)
    value = None
    if tag is not None:
        named = [at for at in left if at != tag and _NAMED_VALUE.search(header[at])]
        value = next(iter([*named, *(at for at in value_like if at != tag)]), None)
    if tag is None or value is None:
        words = _words([cell for at in left for cell in _cells(rows, at)])
        return Columns("wide", None, None, None, None, "", words)
    kind = _quality_kind(_cells(rows, quality)) if quality is not None else "words"
    return Columns("long", tag, value, quality, unit, kind, _words(_cells(rows, value)))


def _clock(rows: Sequence[tuple[str, ...]], date: int) -> int | None:
    """Return the column of times of day beside a column of bare dates."""
    if any(":" in row[date] for row in rows):
        return None
    for at in range(len(rows[0])):
        cells = [row[at] for row in rows if row[at]]
        if at != date and cells and all(_CLOCK.fullmatch(cell) for cell in cells):
            return at
    return None


def _format(texts: Sequence[str], *, numeric: bool) -> tuple[str, str] | None:
    """Return the format that most texts are written in, and what else it might be."""
    fitting = [name for name in _candidates(numeric=numeric) if _fits(name, texts)]
    if not fitting:
        return None
    if {"day_first", "month_first"} <= set(fitting):
        return _order(texts)
    if fitting[0] == "serial_1900":
        return fitting[0], "if the dates are four years early, time_format = 'serial_1904'"
    return fitting[0], ""


def _candidates(*, numeric: bool) -> Iterator[str]:
    numbers = [w for w in _WORDS if w.startswith(("epoch", "serial"))]
    if numeric:
        yield from (*numbers, "%Y%m%d%H%M%S", "%Y%m%d%H%M", "%Y%m%d")
        return
    yield from (word for word in _WORDS if word not in numbers)
    for date, joint, clock in itertools.product(_DATES, (" ", "T", ""), _CLOCKS):
        if joint or date == "%Y%m%d":
            yield f"{date}{joint}{clock}"


def _fits(name: str, texts: Sequence[str]) -> bool:
    if name == "iso" and not all("-" in text for text in texts):
        return False
    time = _read(name, texts)
    return bool((time != NO_TIME).mean() > _MOST)


def _order(texts: Sequence[str]) -> tuple[str, str]:
    """Tell the day from the month where both would do: the right order leaves fewer gaps."""
    spans = {}
    for name in ("day_first", "month_first"):
        time = _read(name, texts)
        time = time[time != NO_TIME]
        spans[name] = int(np.abs(np.diff(np.sort(time))).max()) if len(time) > 1 else 0
    ratio = (spans["month_first"] + 1) / (spans["day_first"] + 1)
    halves = any(re.search(r"[AaPp]\.?[Mm]", text) for text in texts)
    guess, why = ("month_first" if halves else "day_first"), "is a guess"
    if ratio > 5 or ratio < 1 / 5:  # noqa: PLR2004
        guess, why = ("day_first" if ratio > 1 else "month_first"), "leaves the smaller gaps"
    return guess, f"day or month first? time_format = '{guess}' {why}"


def _read(name: str, texts: Sequence[str]) -> npt.NDArray[np.int64]:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # formats that do not fit are expected here
        time = TimeReader(name, "UTC", "," if "," in "".join(texts) else ".").read(
            pa.array(list(texts), pa.string())
        )
    inside = (time.first > _EARLIEST) & (time.first < _LATEST)
    return np.where(inside, time.first, NO_TIME)


def _tag(
    header: Sequence[str],
    rows: Sequence[tuple[str, ...]],
    times: TimeColumns,
    texts: Sequence[int],
) -> int | None:
    """Return the column of tag names: named so, or the one that tells rows of one time apart."""
    named = [at for at in texts if _NAMED_TAG.search(header[at])]
    if named:
        return max(named, key=lambda at: len({row[at] for row in rows}))
    stamps = [tuple(row[at] for at in times.at) for row in rows]
    if len(set(stamps)) == len(stamps):
        return None
    pairs = {at: len({(*s, r[at]) for s, r in zip(stamps, rows, strict=True)}) for at in texts}
    return max(pairs, key=lambda at: pairs[at], default=None)


def _quality(
    header: Sequence[str], rows: Sequence[tuple[str, ...]], columns: Sequence[int]
) -> int | None:
    for at in columns:
        if _NAMED_QUALITY.search(header[at]) and len(set(_cells(rows, at))) <= _SAMPLE // 4:
            return at
    words = QualityWords(QualityOptions())
    for at in columns:
        distinct = sorted(set(_cells(rows, at)))
        if not words.classify(distinct)[1].any():
            return at
    return None


def _quality_kind(cells: Sequence[str]) -> str:
    """Return how quality is written, empty when its codes do not tell."""
    distinct = sorted(set(cells))
    unknown = QualityWords(QualityOptions()).classify(distinct)[1]
    if not unknown.any():
        return "words"
    odd = [cell for cell, is_odd in zip(distinct, unknown, strict=True) if is_odd]
    codes = [int(cell) for cell in distinct if re.fullmatch(r"-?\d{1,10}", cell)]
    if 192 in codes and all(opc_classic(cell) is not None for cell in odd):  # noqa: PLR2004
        return "opc_classic"
    # Small numbers are good as status codes, but hardly ever are any.
    severe = [cell for cell in odd if not re.fullmatch(r"\d{1,8}", cell)]
    return "opc_ua" if severe and all(opc_ua(cell) is not None for cell in odd) else ""


def _words(cells: Sequence[str]) -> tuple[tuple[str, int], ...]:
    known = {word.casefold() for word in BAD_VALUE_WORDS}
    counted = Counter(c for c in cells if not _is_number(c) and c.casefold() not in known)
    return tuple(counted.most_common(12))


def _share(rows: Sequence[tuple[str, ...]], at: int) -> float:
    """Return the share of numbers, and of words for no value, among a column's cells."""
    cells = _cells(rows, at)
    return 1 - sum(count for _, count in _words(cells)) / len(cells)


def _cells(rows: Sequence[tuple[str, ...]], at: int) -> list[str]:
    return [row[at] for row in rows if row[at]]


def _is_number(cell: str) -> bool:
    return bool(_NUMBER.fullmatch(cell)) or cell.casefold().lstrip("+-") in {"inf", "infinity"}
