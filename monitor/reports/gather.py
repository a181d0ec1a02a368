"""Rows that several pages share, gathered from the store: ledger, equipment, condition, alarms."""

from __future__ import annotations

import importlib.metadata
from collections import Counter
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Literal, cast

import numpy as np
import pandas as pd

from dashboards.formats import fitting
from dashboards.views import (
    AlarmRow,
    ConditionRow,
    EquipmentRow,
    EventRow,
    LedgerLine,
    PageContext,
    QualityRow,
)
from monitor.costing import SpanCosts, span_costs
from monitor.drift.message import cost_sentence
from monitor.flags import Flag, describe
from monitor.store.batch import LEFT_OUT_COLUMNS
from monitor.store.handle import SITE_SUBJECT
from monitor.uncertainty import COVERAGE

if TYPE_CHECKING:
    from monitor.equipment.base import Figure, Item
    from monitor.site.load import Site
    from monitor.store.alarms import AlarmRecord
    from monitor.store.events import Event
    from monitor.store.site import SiteStore

__all__ = ["LEDGER_LABELS", "Gathered", "by_subject", "version"]

LedgerKey = Literal["supplied", "used", "lost", "destroyed", "stored", "imbalance"]

LEDGER_LABELS: dict[LedgerKey, str] = {
    "supplied": "Supplied",
    "used": "Used",
    "lost": "Lost",
    "destroyed": "Destroyed",
    "stored": "Change in store",
    "imbalance": "Imbalance of the readings",
}
# The store's column for each line; `stored` is the only one with another name.
_COLUMN: dict[LedgerKey, str] = {k: k for k in LEDGER_LABELS} | {"stored": "stored_rate"}
_PAID: frozenset[LedgerKey] = frozenset({"supplied", "used", "lost", "destroyed"})
_HOURS_PER_DAY = 24.0
# As ISA-18.2 names the states, where the store's own word is shorter.
_STATES = {
    "unacknowledged": "unacknowledged alarm",
    "acknowledged": "acknowledged alarm",
    "returned": "returned to normal, unacknowledged",
}
_SET_ASIDE = frozenset({"shelved", "suppressed by design", "out of service"})
# A flag is worth telling when it holds for more than this share of the cells.
_WORTH_TELLING = 0.02


def version() -> str:
    """The installed version of lostwork."""
    return importlib.metadata.version("lostwork")


@dataclass(frozen=True)
class Gathered:
    """One site's figures over one span, as rows for the pages.

    Attributes:
        site, store: whose.
        start, end: the span, UTC, half open.
        made: when the page is made.
    """

    site: Site
    store: SiteStore
    start: pd.Timestamp
    end: pd.Timestamp
    made: pd.Timestamp

    @property
    def zone(self) -> str:
        """The site's time zone."""
        return self.site.file.site.time_zone

    def local(self, utc: int | pd.Timestamp) -> pd.Timestamp:
        """An instant in the site's local time."""
        stamp = pd.Timestamp(utc, unit="s", tz="UTC") if isinstance(utc, int) else utc
        return stamp.tz_convert(self.zone)

    def localised(self, frame: pd.DataFrame) -> pd.DataFrame:
        """The same table with its UTC time index in local time."""
        return frame.set_axis(pd.DatetimeIndex(frame.index).tz_convert(self.zone), axis=0)

    @cached_property
    def context(self) -> PageContext:
        """What every page's head and foot say."""
        newest = self.store.newest()
        return PageContext(
            site_name=self.site.file.site.name,
            time_zone=self.zone,
            made=self.local(self.made),
            start=self.local(self.start),
            end=self.local(self.end),
            newest=None if newest is None else self.local(newest),
            version=version(),
            equipment=tuple((i.id, i.name) for i in self.site.items.values()),
        )

    @cached_property
    def costs(self) -> SpanCosts:
        """What exergy costs at each point of the site over the span."""
        return span_costs(self.site, self.store, self.start, self.end)

    def cost(self, mwh: float) -> float:
        """What so much exergy costs at the mean price of what is supplied, in the currency."""
        return mwh * self.costs.mean_price

    def ledger(self, start: pd.Timestamp, end: pd.Timestamp) -> tuple[LedgerLine, ...]:
        """The ledger's lines over a span."""
        tables = by_subject(self.store.means("site", start, end))
        table = next(iter(tables.values()), pd.DataFrame())
        u = self.store.uncertainties("site", start, end)
        return tuple(self._line(key, table, u) for key in LEDGER_LABELS)

    def _line(
        self, key: LedgerKey, table: pd.DataFrame, u: dict[tuple[str, str], float]
    ) -> LedgerLine:
        live = _value(table, f"{_COLUMN[key]}_live_kw", "mean")
        covered = _value(table, f"{_COLUMN[key]}_live_kw", "covered_s")
        mwh = live * covered / 3.6e6
        paid = key in _PAID and np.isfinite(mwh)
        return LedgerLine(
            key=key,
            label=LEDGER_LABELS[key],
            live_kw=live,
            reference_kw=_value(table, f"{_COLUMN[key]}_reference_kw", "mean"),
            live_mwh=mwh,
            cost=self.cost(mwh) if paid else None,
            co2_t=mwh * self.costs.mean_emission / 1e3 if paid else None,
            expanded_kw=COVERAGE * u.get((SITE_SUBJECT, f"{_COLUMN[key]}_live_kw"), np.nan),
        )

    def ledger_trend(self, start: pd.Timestamp, end: pd.Timestamp) -> pd.DataFrame:
        """The ledger by the hour [kW, live], local time."""
        rolled = self.store.rollups("site", "hour", start, end)
        wide = rolled.pivot_table(index="start", columns="figure", values="mean", observed=True)
        columns = {key: f"{_COLUMN[key]}_live_kw" for key in LEDGER_LABELS}
        table = pd.DataFrame(
            {key: wide.get(name, np.nan) for key, name in columns.items()},
            index=wide.index,
        )
        return self.localised(table)

    @cached_property
    def equipment_means(self) -> pd.DataFrame:
        """Means of every equipment figure over the span."""
        return self.store.means("equipment", self.start, self.end)

    @cached_property
    def _span_uncertainties(self) -> dict[tuple[str, str], float]:
        return self.store.uncertainties("equipment", self.start, self.end)

    @cached_property
    def _newest_uncertainties(self) -> dict[tuple[str, str], float]:
        return self.store.uncertainties("equipment", self._last_day, self.end)

    @property
    def _last_day(self) -> pd.Timestamp:
        return max(self.start, self.end - pd.Timedelta(days=1))

    def equipment_rows(self) -> tuple[EquipmentRow, ...]:
        """Every piece of equipment, the most destroyed exergy first."""
        known, flags = by_subject(self.equipment_means), self._flag_shares("equipment")
        tables = {i.id: known.get(i.id, pd.DataFrame()) for i in self.items}
        destroyed = {k: _value(t, "destroyed_live_kw", "mean") for k, t in tables.items()}
        total = float(np.nansum(list(destroyed.values())))
        rows = [
            self._equipment_row(i, tables[i.id], flags.get(i.id, {}), total) for i in self.items
        ]
        return tuple(sorted(rows, key=lambda r: -np.nan_to_num(r.destroyed_kw, nan=-np.inf)))

    @property
    def items(self) -> tuple[Item, ...]:
        """The site's equipment in the order of the site file."""
        return tuple(self.site.items.values())

    def _equipment_row(
        self, item: Item, table: pd.DataFrame, flags: dict[Flag, float], total: float
    ) -> EquipmentRow:
        destroyed = _value(table, "destroyed_live_kw", "mean")
        fuel = _value(table, "fuel_live_kw", "mean")
        product = _value(table, "product_live_kw", "mean")
        told = {
            bit: share
            for bit, share in flags.items()
            if share > _WORTH_TELLING and not bit & (Flag.OFF | Flag.UNSTEADY | Flag.STARTING)
        }
        return EquipmentRow(
            id=item.id,
            name=item.name,
            kind=item.kind.title,
            destroyed_kw=destroyed,
            destroyed_reference_kw=_value(table, "destroyed_reference_kw", "mean"),
            share=destroyed / total if total > 0 else np.nan,
            cost_per_day=destroyed * _HOURS_PER_DAY / 1e3 * self.costs.money.equipment[item.id],
            psi=product / fuel if fuel > 0 else np.nan,
            psi_statement=item.kind.fuel_and_product,
            closure_kw=_value(table, "closure_live_kw", "mean"),
            mass_imbalance_kg_s=_value(table, "mass_imbalance_kg_s", "mean"),
            energy_imbalance_kw=_value(table, "energy_imbalance_kw", "mean"),
            running_share=1.0 - flags.get(Flag.OFF, 0.0),
            flags=tuple((describe(bit), told[bit]) for bit in sorted(told)),
            destroyed_expanded_kw=COVERAGE
            * self._span_uncertainties.get((item.id, "destroyed_live_kw"), np.nan),
        )

    def _flag_shares(self, kind: Literal["stream", "equipment"]) -> dict[str, dict[Flag, float]]:
        """Share of the span's cells that carry each flag, by subject."""
        counts = self.store.flag_counts(kind, self.start, self.end)
        shares: dict[str, dict[Flag, float]] = {}
        for subject, rows in counts.groupby("subject", observed=True):
            total = float(rows["cells"].sum())
            bits: Counter[Flag] = Counter()
            for flag, cells in zip(rows["flag"], rows["cells"], strict=True):
                bits.update(dict.fromkeys(Flag(int(flag)), int(cells)))
            shares[str(subject)] = {bit: cells / total for bit, cells in bits.items()}
        return shares

    def stream_flags(self) -> dict[str, str]:
        """What each stream's figures rest on, in words."""
        return {
            stream: describe(sum(bit for bit, share in bits.items() if share > _WORTH_TELLING))
            for stream, bits in self._flag_shares("stream").items()
        }

    def condition_rows(self, only: str | None = None) -> tuple[ConditionRow, ...]:
        """Every condition figure as it stands at the end of the span."""
        rows = [
            self._condition_row(item, figure)
            for item in self.items
            if only in (None, item.id)
            for figure in item.kind.figures(item)
        ]
        order = {"drifting": 0, "steady": 1, "no baseline": 2, "not judged": 3}
        return tuple(sorted(rows, key=lambda r: order[r.state]))

    def _condition_row(self, item: Item, figure: Figure) -> ConditionRow:
        judged = self._judged_points(item.id, figure.name)
        last = judged.iloc[-1] if len(judged) else None
        if not figure.judged:
            state: Literal["steady", "drifting", "no baseline", "not judged"] = "not judged"
        elif last is None:
            state = "no baseline"
        else:
            state = "drifting" if self._open(item.id, figure.name) else "steady"
        alarm = self._open(item.id, figure.name)
        current = self._latest(item.id, figure.name) if last is None else float(last["measured"])
        return ConditionRow(
            equipment=item.id,
            equipment_name=item.name,
            figure=figure.name,
            label=figure.label,
            unit=figure.unit,
            current=current,
            expected=np.nan if last is None else float(last["expected"]),
            residual=np.nan if last is None else float(last["ewma"]),
            limit=np.nan if last is None else float(last["limit"]),
            state=state,
            since=None if alarm is None else self.local(alarm.raised),
            worse=figure.worse,
            smallest_change=self.smallest_change(item, figure),
            expanded=COVERAGE * self._newest_uncertainties.get((item.id, figure.name), np.nan),
        )

    def smallest_change(self, item: Item, figure: Figure) -> float:
        """The smallest change worth a person's time: the site's own, or else the kind's."""
        stated = [
            own.smallest_change
            for own in self.site.file.drift.figure
            if (own.equipment, own.figure) == (item.id, figure.name)
        ]
        own = stated[-1] if stated else None
        return figure.smallest_change if own is None else own

    def _latest(self, equipment: str, figure: str) -> float:
        """Weighted mean over the last day of the span, for figures that nobody judges."""
        rolled = self.store.rollups(
            "equipment", "hour", self._last_day, self.end, subject=equipment, figures=[figure]
        )
        weight = rolled["weight"].to_numpy()
        if not len(rolled) or weight.sum() <= 0:
            return np.nan
        return float((rolled["mean"].to_numpy() * weight).sum() / weight.sum())

    def drift_points(self, equipment: str, figure: str) -> pd.DataFrame:
        """Hourly points of one control chart over the span, UTC index."""
        return self.store.drift_points(equipment, figure, self.start, self.end)

    def _judged_points(self, equipment: str, figure: str) -> pd.DataFrame:
        """Those of the baseline that is in force at the span's end: an event retires the others."""
        points = self.drift_points(equipment, figure)
        if points.empty:
            return points
        of = points["baseline_id"]
        # Without one now, nothing is equal to it.
        same = (of == of.iloc[-1]).fillna(value=False).astype(bool)
        kept: pd.DataFrame = points[points["judged"].astype(bool) & same]
        return kept

    @cached_property
    def _open_alarms(self) -> dict[tuple[str, str], AlarmRecord]:
        return {(a.subject, a.figure): a for a in self.store.open_alarms() if a.cleared is None}

    def _open(self, equipment: str, figure: str) -> AlarmRecord | None:
        return self._open_alarms.get((equipment, figure))

    def alarm_row(self, alarm: AlarmRecord) -> AlarmRow:
        """One alarm for a page."""
        item = self.site.items.get(alarm.subject)
        labels = {f.name: f.label for f in item.kind.figures(item)} if item else {}
        return AlarmRow(
            id=alarm.alarm_id,
            equipment=alarm.subject,
            equipment_name=item.name if item else alarm.subject,
            figure_label=labels.get(alarm.figure, alarm.figure),
            state=_STATES.get(alarm.state, alarm.state),
            priority=alarm.priority,
            raised=self.local(alarm.raised),
            cleared=None if alarm.cleared is None else self.local(alarm.cleared),
            message=self._own_words(alarm, item),
            cost_per_day=alarm.cost_per_day,
            set_aside=alarm.state in _SET_ASIDE,
            newest=self._newest_words(alarm, item),
        )

    def _newest_words(self, alarm: AlarmRecord, item: Item | None) -> str:
        """How a figure that is out stands now: its alarm's message tells of when it was raised."""
        figures = {f.name: f for f in item.kind.figures(item)} if item else {}
        figure = figures.get(alarm.figure)
        if item is None or figure is None or alarm.cleared is not None:
            return ""
        judged = self._judged_points(alarm.subject, alarm.figure)
        if not len(judged):
            return ""
        smallest = self.smallest_change(item, figure)
        measured, expected = (
            fitting(float(judged[name].iloc[-1]), figure.unit, smallest)
            for name in ("measured", "expected")
        )
        return f"in the newest judged hour {measured}, expected {expected}"

    def _own_words(self, alarm: AlarmRecord, item: Item | None) -> str:
        """The message without what stands beside it on a page: the name and the cost."""
        text = alarm.message if item is None else alarm.message.removeprefix(f"{item.name}: ")
        if alarm.cost_per_day is None or not alarm.cost_per_day > 0:
            return text
        currency = self.site.file.economics.currency
        return text.removesuffix(f" {cost_sentence(alarm.cost_per_day, currency)}")

    def open_alarms(self) -> tuple[AlarmRow, ...]:
        """Open alarms, the most urgent and newest first."""
        urgency = {"high": 0, "medium": 1, "low": 2}
        alarms = sorted(
            self.store.open_alarms(), key=lambda a: (urgency.get(a.priority, 3), -a.raised)
        )
        return tuple(self.alarm_row(a) for a in alarms)

    def alarms_between(
        self, start: pd.Timestamp, end: pd.Timestamp, only: str | None = None
    ) -> tuple[AlarmRow, ...]:
        """Alarms that were raised, changed or open in a span, newest first."""
        found = self.store.alarm_history(start, end)
        chosen = [a for a in found if only in (None, a.subject)]
        return tuple(self.alarm_row(a) for a in sorted(chosen, key=lambda a: -a.raised))

    def events(
        self, start: pd.Timestamp, end: pd.Timestamp, only: str | None = None
    ) -> tuple[EventRow, ...]:
        """Events recorded in a span, newest first."""
        found = [e for e in self.store.events(start, end) if only in (None, e.subject, "")]
        return tuple(self._event_row(e) for e in sorted(found, key=lambda e: -e.time))

    def _event_row(self, event: Event) -> EventRow:
        item = self.site.items.get(event.subject)
        name = item.name if item else event.subject or self.site.file.site.name
        return EventRow(self.local(event.time), name, event.kind, event.note)

    def quality(self, start: pd.Timestamp, end: pd.Timestamp) -> tuple[QualityRow, ...]:
        """What each tag delivered in a span, the worst first."""
        totals = self.store.tag_quality_totals(start, end)
        rows = [
            self._quality_row({str(k): v for k, v in row.items()})
            for row in totals.to_dict("records")
        ]
        return tuple(
            sorted(rows, key=lambda r: (-(r.bad + r.missing + r.uncertain + r.stuck), r.tag))
        )

    def _quality_row(self, row: dict[str, object]) -> QualityRow:
        counts = {k: int(cast("int", v)) for k, v in row.items() if k != "tag"}
        name = str(row["tag"])
        tag = self.site.tags.get(name)
        readings, cells = max(counts["readings"], 1), max(counts["cells"], 1)
        return QualityRow(
            tag=name,
            description=tag.description if tag else "no longer in the site file",
            unit=tag.unit.text if tag else "",
            readings=counts["readings"],
            good=counts["good"] / readings,
            uncertain=counts["uncertain"] / readings,
            bad=sum(counts[name] for name in LEFT_OUT_COLUMNS) / readings,
            missing=counts["cells_missing"] / cells,
            held=counts["cells_held"] / cells,
            stuck=counts["cells_stuck"] / cells,
        )


def _value(table: pd.DataFrame, figure: str, column: str) -> float:
    """One number of a table of means, NaN when the figure has none."""
    if figure not in table.index:
        return np.nan
    return float(cast("float", table.loc[figure, column]))


def by_subject(means: pd.DataFrame) -> dict[str, pd.DataFrame]:
    """Cut a table of means (by subject and figure) into one table a subject, by figure."""
    if means.empty:
        return {}
    groups = means.groupby(level="subject", observed=True)
    return {str(subject): table.droplevel("subject") for subject, table in groups}
