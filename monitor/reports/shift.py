"""The shift report: what changed, what it costs, what to do."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

import dashboards
from dashboards.formats import energy_column, money_column, percent, power_column, quantity
from dashboards.views import LedgerLine, ShiftView
from monitor.reports.gather import Gathered

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from dashboards.views import AlarmRow, EquipmentRow, QualityRow
    from monitor.site.load import Site
    from monitor.site.shifts import Span
    from monitor.store.site import SiteStore

__all__ = ["shift_text", "shift_view", "write_shift_report"]

_WEEK = 7
# A change of destroyed exergy under this share of the week's mean is not worth a sentence.
_NOTICEABLE = 0.03
_POOR = 0.05
# A shift of which less has figures is no measure for another.
_MOST = 0.75
# So many alarms are named in a sentence.
_NAMED = 3


def write_shift_report(
    site: Site, store: SiteStore, span: Span, now: pd.Timestamp, folder: Path
) -> Path:
    """Write one shift's report and return its path.

    Raises:
        PageError: the folder cannot be written.
    """
    view = shift_view(site, store, span, now)
    dashboards.write_assets(folder)
    return dashboards.write_shift(view, folder)


def shift_view(site: Site, store: SiteStore, span: Span, now: pd.Timestamp) -> ShiftView:
    """Gather the report of one shift."""
    start = pd.Timestamp(span.start, unit="s", tz="UTC")
    end = pd.Timestamp(span.end, unit="s", tz="UTC")
    gathered = Gathered(site, store, start, end, now)
    ledger = gathered.ledger(start, end)
    before = _shifts_before(gathered, span)
    previous = tuple(_mean_line(lines) for lines in zip(*before, strict=True))
    rows = gathered.equipment_rows()
    alarms = gathered.alarms_between(start, end)
    quality = tuple(q for q in gathered.quality(start, end) if _worth_a_look(q))
    # A control chart needs its history; the shift alone would show no point of it.
    history = replace(gathered, start=end - pd.Timedelta(days=14))
    return ShiftView(
        context=gathered.context,
        shift_name=span.name,
        summary=_summary(gathered, ledger, (previous, len(before)), rows, alarms, quality),
        ledger=ledger,
        previous_ledger=previous,
        equipment=rows,
        conditions=history.condition_rows(),
        alarms=alarms,
        events=gathered.events(start, end),
        quality=quality,
        ledger_trend=gathered.ledger_trend(start, end),
        currency=site.file.economics.currency,
    )


def _worth_a_look(row: QualityRow) -> bool:
    return row.bad + row.missing + row.uncertain + row.stuck > _POOR


def _shifts_before(gathered: Gathered, span: Span) -> list[tuple[LedgerLine, ...]]:
    """Ledgers of the same shift on the seven days before, where most of it has figures."""
    spans = gathered.site.calendar.spans(span.start - (_WEEK + 1) * 86400, span.start)
    same = [s for s in spans if s.name == span.name][-_WEEK:]
    found = []
    for one in same:
        start = pd.Timestamp(one.start, unit="s", tz="UTC")
        lines = gathered.ledger(start, pd.Timestamp(one.end, unit="s", tz="UTC"))
        supplied = lines[0]
        hours = supplied.live_mwh * 1e3 / supplied.live_kw if supplied.live_kw else np.nan
        if hours >= _MOST * (one.end - one.start) / 3600.0:
            found.append(lines)
    return found


def _mean_line(lines: Sequence[LedgerLine]) -> LedgerLine:
    paid = lines[0].cost is not None

    def mean(values: Sequence[float | None]) -> float:
        return float(np.nanmean([np.nan if v is None else v for v in values]))

    return LedgerLine(
        key=lines[0].key,
        label=lines[0].label,
        live_kw=mean([x.live_kw for x in lines]),
        reference_kw=mean([x.reference_kw for x in lines]),
        live_mwh=mean([x.live_mwh for x in lines]),
        cost=mean([x.cost for x in lines]) if paid else None,
        co2_t=mean([x.co2_t for x in lines]) if paid else None,
    )


def _summary(
    gathered: Gathered,
    ledger: tuple[LedgerLine, ...],
    previous: tuple[tuple[LedgerLine, ...], int],
    rows: tuple[EquipmentRow, ...],
    alarms: tuple[AlarmRow, ...],
    quality: tuple[QualityRow, ...],
) -> tuple[str, ...]:
    lines = {line.key: line for line in ledger}
    if not np.isfinite(lines["destroyed"].live_kw):
        return ("There are no figures for this shift: look at the sources with `lostwork check`.",)
    sentences = [_destroyed_sentence(gathered, lines["destroyed"], previous)]
    if rows and np.isfinite(rows[0].destroyed_kw):
        top = rows[0]
        sentences.append(
            f"Most of it in {top.name}: {_power(top.destroyed_kw)}, "
            f"{percent(top.share, 0)} of the site's."
        )
    sentences += _alarm_sentences(gathered, alarms)
    if quality:
        named = ", ".join(q.tag for q in quality[:3])
        more = f" and {len(quality) - 3} more" if len(quality) > 3 else ""  # noqa: PLR2004
        sentences.append(f"Look at the readings of {named}{more}: many are bad or missing.")
    return tuple(sentences)


def _destroyed_sentence(
    gathered: Gathered, now: LedgerLine, previous: tuple[tuple[LedgerLine, ...], int]
) -> str:
    lines, count = previous
    currency = gathered.site.file.economics.currency
    cost = "" if now.cost is None else f", worth {_money(now.cost, currency)}"
    energy = energy_column([now.live_mwh]).with_unit(now.live_mwh)
    base = f"The site destroyed {energy} of exergy ({_power(now.live_kw)}){cost}"
    before = next((line for line in lines if line.key == "destroyed"), None)
    if before is None:
        return f"{base}; no shift of that name in the week before has figures to compare with."
    same = f"the {count} same shifts" if count > 1 else "the one same shift"
    live = now.live_kw / before.live_kw - 1.0
    reference = now.reference_kw / before.reference_kw - 1.0
    if abs(live) < _NOTICEABLE:
        return f"{base}: as in {same} of the week before."
    word = "more" if live > 0 else "less"
    if abs(reference) < _NOTICEABLE:
        why = "at the fixed reference dead state it is unchanged, so this is the weather"
    else:
        why = (
            f"{percent(abs(reference), 0)} {'more' if reference > 0 else 'less'} with the weather "
            "taken out"
        )
    return f"{base}: {percent(abs(live), 0)} {word} than {same} of the week before; {why}."


def _power(kw: float) -> str:
    return power_column([kw]).with_unit(kw)


def _money(amount: float, currency: str) -> str:
    return money_column([amount], currency).with_unit(amount)


def _alarm_sentences(gathered: Gathered, alarms: tuple[AlarmRow, ...]) -> list[str]:
    """Say what is new, and what stands; the list below says why."""
    active = [a for a in alarms if a.cleared is None]
    if not active:
        return ["No alarm is open."]
    start = gathered.context.start
    new = [a for a in active if a.raised >= start]
    cost = sum(a.cost_per_day for a in active if a.cost_per_day is not None)
    worth = (
        f", {'together ' if len(active) > 1 else ''}about "
        f"{quantity(cost, gathered.site.file.economics.currency, 2)} a day when raised"
        if cost > 0
        else ""
    )
    count = "1 alarm is open" if len(active) == 1 else f"{len(active)} alarms are open"
    sentences = [f"{count}{worth}: {_named(active)}."]
    if new and len(new) < len(active):
        sentences.append(f"New in this shift: {_named(new)}.")
    elif new:
        sentences[0] = sentences[0].removesuffix(".") + "; new in this shift."
    return sentences


def _named(alarms: list[AlarmRow]) -> str:
    names = "; ".join(f"{a.equipment_name}, {a.figure_label}" for a in alarms[:_NAMED])
    return names if len(alarms) <= _NAMED else f"{names}; and {len(alarms) - _NAMED} more"


def shift_text(view: ShiftView) -> str:
    """The report for a terminal."""
    head = (
        f"{view.context.site_name}, {view.shift_name} shift, "
        f"{view.context.start:%Y-%m-%d %H:%M} to {view.context.end:%H:%M} {view.context.time_zone}"
    )
    before = {line.key: line.live_kw for line in view.previous_ledger}
    width = max(len(line.label) for line in view.ledger)
    table = [f"{'':{width}}  {'kW':>10}  {'MWh':>9}  {'week before, kW':>15}"]
    table += [
        f"{line.label:{width}}  {_plain(line.live_kw, 0):>10}  {_plain(line.live_mwh, 1):>9}  "
        f"{_plain(before.get(line.key, np.nan), 0):>15}"
        for line in view.ledger
    ]
    alarms = [
        f"- {a.equipment_name}: {a.message}"
        + (
            ""
            if a.cost_per_day is None
            else f" {quantity(a.cost_per_day, view.currency, 2)} a day when raised."
        )
        + (f" {a.newest[:1].upper()}{a.newest[1:]}." if a.newest else "")
        for a in view.alarms
        if a.cleared is None
    ]
    text = "\n".join([head, "", *view.summary, *([""] if alarms else []), *alarms, "", *table])
    # A terminal and what copies from it do better with plain spaces.
    return text.replace("\u202f", " ").replace("\u00a0", " ")


def _plain(value: float, decimals: int) -> str:
    """A number for a table in a terminal; a dash for none, and no sign before a nought."""
    if not np.isfinite(value):
        return "-"
    # Adding zero takes the sign from a zero.
    return f"{round(value, decimals) + 0.0:,.{decimals}f}".replace(",", " ")
