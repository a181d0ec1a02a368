"""What a page draws: frozen view objects, filled by ``monitor.reports``, drawn by this package.

Every time is timezone-aware and already in the site's local zone. Every number is in the unit that
its field or its neighbour field names. Text comes from site files and historians: it is data, never
markup, and every page escapes it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "AlarmRow",
    "ConditionRow",
    "CostRow",
    "CostsView",
    "DeadStateView",
    "EquipmentRow",
    "EquipmentView",
    "EventRow",
    "ExpansionView",
    "FlowLink",
    "LedgerLine",
    "LossRow",
    "OverviewView",
    "PageContext",
    "QualityRow",
    "ResidualView",
    "ShiftView",
    "StreamCostRow",
    "TrendView",
]


@dataclass(frozen=True)
class PageContext:
    """What every page's head and foot say."""

    site_name: str
    time_zone: str
    made: pd.Timestamp
    """When the page was made."""
    start: pd.Timestamp
    end: pd.Timestamp
    """The span of time that the page covers."""
    newest: pd.Timestamp | None
    """The newest figure's time; a page whose data are old says so."""
    version: str
    equipment: tuple[tuple[str, str], ...]
    """(id, name) of every piece of equipment, for the navigation."""


@dataclass(frozen=True)
class LedgerLine:
    """One line of the ledger over the span."""

    key: Literal["supplied", "used", "lost", "destroyed", "stored", "imbalance"]
    label: str
    live_kw: float
    """Mean rate at the live dead state, kW."""
    reference_kw: float
    live_mwh: float
    """Total over the span, MWh."""
    cost: float | None
    """Total cost over the span in the site's currency, None where a cost makes no sense."""
    co2_t: float | None
    expanded_kw: float = math.nan
    """Expanded uncertainty (k = 2) of the live mean from the instruments, kW; NaN for not known."""


@dataclass(frozen=True)
class FlowLink:
    """One link of the exergy flow diagram: mean exergy rate from one node to another, kW."""

    source: str
    target: str
    label: str
    kw: float
    kind: Literal["water", "fuel", "power", "heat", "destroyed", "lost"]


@dataclass(frozen=True)
class EquipmentRow:
    """One piece of equipment over the span."""

    id: str
    name: str
    kind: str
    destroyed_kw: float
    destroyed_reference_kw: float
    share: float
    """Part of the site's destroyed exergy, 0 to 1."""
    cost_per_day: float
    """At the unit cost of the exergy that it takes as its fuel, in the site's currency."""
    psi: float
    """Exergetic efficiency, 0 to 1."""
    psi_statement: str
    """Fuel and product in words."""
    closure_kw: float
    mass_imbalance_kg_s: float
    energy_imbalance_kw: float
    running_share: float
    """Part of the span in service, 0 to 1."""
    flags: tuple[tuple[str, float], ...]
    """What the figures rest on: words, and the part of the span it holds for, 0 to 1."""
    destroyed_expanded_kw: float = math.nan
    """Expanded uncertainty (k = 2) of ``destroyed_kw`` from the instruments; NaN for not known."""


@dataclass(frozen=True)
class ConditionRow:
    """One condition figure now, against its baseline."""

    equipment: str
    equipment_name: str
    figure: str
    label: str
    unit: str
    current: float
    expected: float
    residual: float
    """Smoothed (EWMA) measured minus expected, in the figure's unit."""
    limit: float
    """The chart's limit for that residual, in the figure's unit."""
    state: Literal["steady", "drifting", "no baseline", "not judged"]
    since: pd.Timestamp | None
    worse: Literal["low", "high", "both"]
    smallest_change: float = 0.0
    """The smallest change that matters, in the figure's unit; 0 where none is stated."""
    expanded: float = math.nan
    """Expanded uncertainty (k = 2) of the last day's figures, in their unit; NaN for not known."""


@dataclass(frozen=True)
class AlarmRow:
    """One alarm as it stands."""

    id: int
    equipment: str
    equipment_name: str
    figure_label: str
    state: str
    """A state of ISA-18.2 / IEC 62682 in words."""
    priority: str
    raised: pd.Timestamp
    cleared: pd.Timestamp | None
    message: str
    """What changed and why it is so, without the equipment's name and the cost beside it."""
    cost_per_day: float | None
    """As it was when the alarm was raised, like the message."""
    set_aside: bool = False
    """Shelved, suppressed by design or out of service: known, and not to be acted on now."""
    newest: str = ""
    """Of an alarm that stands: what its figure was in the newest judged hour; empty for none."""


@dataclass(frozen=True)
class EventRow:
    """One recorded event: a wash, an overhaul, a calibration."""

    time: pd.Timestamp
    equipment_name: str
    kind: str
    note: str


@dataclass(frozen=True)
class QualityRow:
    """One tag's readings over the span; shares from 0 to 1 that add up over good to missing."""

    tag: str
    description: str
    unit: str
    readings: int
    good: float
    uncertain: float
    bad: float
    """Left out: called bad by the historian, out of range, too fast, or a spike."""
    missing: float
    """Grid cells without any usable reading, as a share of all cells."""
    held: float
    """Grid cells bridged with a held value, as a share of all cells."""
    stuck: float = 0.0
    """Grid cells whose value stands still while its neighbours move, as a share of all cells."""


@dataclass(frozen=True)
class TrendView:
    """One figure over time; where ``expected`` and ``limit`` exist they frame the line."""

    title: str
    label: str
    unit: str
    data: pd.DataFrame
    """Local-time index; columns ``value`` and, when there is a baseline, ``expected``, ``low``,
    ``high`` (limits around expected); ``minimum`` and ``maximum`` where it is a roll-up."""


@dataclass(frozen=True)
class ResidualView:
    """A control chart: hourly residuals, their EWMA and its limits."""

    figure: str
    label: str
    unit: str
    data: pd.DataFrame
    """Local-time index; columns ``residual``, ``ewma``, ``low``, ``high``; NaN where not judged."""
    alarms: tuple[tuple[pd.Timestamp, str], ...]
    events: tuple[EventRow, ...]
    reference: tuple[pd.Timestamp, pd.Timestamp] | None
    """The reference period the baseline was fitted on."""
    design: str
    """What the limits are designed for, in a sentence."""


@dataclass(frozen=True)
class ExpansionView:
    """The expansion line of a turbine on the h-s chart."""

    points: pd.DataFrame
    """Columns ``label``, ``entropy`` kJ/(kg K), ``enthalpy`` kJ/kg, ``pressure`` bar(a),
    ``temperature`` degC, ``dryness``, ``ideal_entropy``, ``ideal_enthalpy``; in order of flow."""
    baseline_points: pd.DataFrame | None
    """The same in the reference period, or None."""
    dome: pd.DataFrame
    """Saturation line: ``entropy``, ``enthalpy``; liquid side first."""
    isobars: tuple[tuple[str, pd.DataFrame], ...]
    """(label, table with ``entropy`` and ``enthalpy``)."""


@dataclass(frozen=True)
class OverviewView:
    """The overview page."""

    context: PageContext
    ledger: tuple[LedgerLine, ...]
    ledger_trend: pd.DataFrame
    """Local-time index; columns ``supplied``, ``used``, ``lost``, ``destroyed``, ``stored``,
    ``imbalance`` in kW at the live dead state."""
    flows: tuple[FlowLink, ...]
    node_names: dict[str, str]
    equipment: tuple[EquipmentRow, ...]
    """Ranked by destroyed exergy, most first."""
    conditions: tuple[ConditionRow, ...]
    alarms: tuple[AlarmRow, ...]
    """Open alarms, most urgent first."""
    quality: tuple[QualityRow, ...]
    """Worst first."""
    currency: str


@dataclass(frozen=True)
class EquipmentView:
    """One equipment's page."""

    context: PageContext
    row: EquipmentRow
    conditions: tuple[ConditionRow, ...]
    trends: tuple[TrendView, ...]
    residuals: tuple[ResidualView, ...]
    expansion: ExpansionView | None
    alarms: tuple[AlarmRow, ...]
    events: tuple[EventRow, ...]
    streams: pd.DataFrame
    """Means over the last day: columns ``port``, ``stream``, ``flow`` t/h, ``pressure`` bar(a),
    ``temperature`` degC, ``dryness``, ``exergy`` kW, ``flags`` (words)."""
    currency: str


@dataclass(frozen=True)
class CostRow:
    """What one piece of equipment's destruction costs, by the chain that supplies it."""

    id: str
    name: str
    destroyed_kw: float
    """Mean over the span at the live dead state."""
    unit_cost: float
    """Cost of the exergy that it takes as its fuel, in the site's currency per MWh."""
    cost_per_day: float
    mean_per_day: float
    """The same destruction at the mean price of what is supplied, as in the ledger."""
    fuel_kw: float
    """Fuel that the chain burns for what is destroyed here, by its lower heating value."""
    co2_t_per_day: float
    avoidable_kw: float
    """Destroyed beyond the best demonstrated at like load in the reference period."""
    avoidable_per_day: float
    compared: float
    """Part of the hours in service that could be compared with the reference period, 0 to 1."""


@dataclass(frozen=True)
class LossRow:
    """One stream that leaves the site for nothing, or heat that a piece of equipment loses."""

    name: str
    exergy_kw: float
    cost_per_day: float
    co2_t_per_day: float


@dataclass(frozen=True)
class StreamCostRow:
    """Unit cost of one stream's exergy."""

    name: str
    exergy_kw: float
    unit_cost: float
    """In the site's currency per MWh of exergy."""
    per_tonne: float
    """In the site's currency per tonne; NaN for what has no mass flow."""
    co2: float
    """kg per MWh of exergy."""
    fuel: float
    """MWh of fuel (lower heating value) per MWh of exergy."""
    note: str
    """Why the site's flat price stands in; empty where the rules gave a cost."""


@dataclass(frozen=True)
class CostsView:
    """The page of costs."""

    context: PageContext
    equipment: tuple[CostRow, ...]
    """The dearest first."""
    losses: tuple[LossRow, ...]
    """The dearest first."""
    streams: tuple[StreamCostRow, ...]
    """In the order of the site file."""
    supplied_per_day: float
    """What all that enters costs."""
    mean_price: float
    """Mean price of what is supplied, currency per MWh of exergy."""
    reference: tuple[pd.Timestamp, pd.Timestamp] | None
    """The reference period that the best was demonstrated in; None while there is none."""
    currency: str


@dataclass(frozen=True)
class DeadStateView:
    """The dead-state page: the weather, and what it did to the ledger."""

    context: PageContext
    ambient: pd.DataFrame
    """Local-time index; ``temperature`` degC, ``pressure`` mbar, ``held`` (bool)."""
    ledger: pd.DataFrame
    """Local-time index; ``destroyed_live``, ``destroyed_reference``, ``supplied_live``,
    ``supplied_reference``, ``lost_live``, ``lost_reference`` in kW."""
    reference_temperature: float
    reference_pressure: float
    """degC and mbar."""
    freezing_hours: float
    held_hours: float
    weather_effect: pd.DataFrame
    """One row a month or week: ``period`` (text), ``t0_mean`` degC, ``destroyed_live_mwh``,
    ``destroyed_reference_mwh``, ``difference_mwh``."""


@dataclass(frozen=True)
class ShiftView:
    """The shift report: one printed page, then details."""

    context: PageContext
    shift_name: str
    summary: tuple[str, ...]
    """A few sentences: what changed, what it costs, what to do."""
    ledger: tuple[LedgerLine, ...]
    previous_ledger: tuple[LedgerLine, ...]
    """The same shift name's mean of the seven days before."""
    equipment: tuple[EquipmentRow, ...]
    conditions: tuple[ConditionRow, ...]
    alarms: tuple[AlarmRow, ...]
    """Raised, changed or still open during the shift."""
    events: tuple[EventRow, ...]
    quality: tuple[QualityRow, ...]
    """Only the tags worth a look."""
    ledger_trend: pd.DataFrame
    currency: str
