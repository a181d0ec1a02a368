"""The expansion line of a turbine on the h-s chart, now and in the reference period."""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from dashboards.views import ExpansionView
from monitor.thermo.water import saturated, state_ph, state_ps

if TYPE_CHECKING:
    from monitor.equipment.base import Item
    from monitor.reports.gather import Gathered

__all__ = ["expansion_view"]

_EXPANDING = ("inlet", "extraction", "exhaust")
_DOME_FROM, _DOME_TO = 4e3, 22.0e6


def expansion_view(gathered: Gathered, item: Item) -> ExpansionView | None:
    """Gather the expansion line, None for equipment that does not expand steam to power."""
    # A kind that takes steam in and gives power out expands it; ports tell, not the kind's name.
    facing = {port.name: port.direction for port in item.kind.ports}
    if facing.get("inlet") != "in" or facing.get("exhaust") != "out" or "power" not in facing:
        return None
    day = max(gathered.start, gathered.end - pd.Timedelta(days=1))
    points = _points(gathered, item, day, gathered.end)
    if points is None:
        return None
    pressures = tuple(round(float(p), 3) for p in points["pressure"])
    return ExpansionView(
        points=points,
        baseline_points=_baseline_points(gathered, item),
        dome=_dome(),
        isobars=tuple((f"{p:.3g} bar", _isobar(p)) for p in pressures),
    )


def _baseline_points(gathered: Gathered, item: Item) -> pd.DataFrame | None:
    known = [
        b for (subject, _), b in gathered.store.current_baselines().items() if subject == item.id
    ]
    if not known:
        return None
    start = min(b.reference_start for b in known)
    end = max(b.reference_end for b in known)
    return _points(
        gathered,
        item,
        pd.Timestamp(start, unit="s", tz="UTC"),
        pd.Timestamp(end, unit="s", tz="UTC"),
    )


def _points(
    gathered: Gathered, item: Item, start: pd.Timestamp, end: pd.Timestamp
) -> pd.DataFrame | None:
    """Mean states of the expansion over a span, with the ideal end of each section."""
    means = gathered.store.means("stream", start, end)
    streams = [s for port in _EXPANDING for s in item.ports.get(port, ())]
    wanted = [(s, f) for s in streams for f in ("pressure_bar", "enthalpy_kj_kg")]
    if not all(at in means.index for at in wanted):
        return None
    p = np.array([means.loc[(s, "pressure_bar"), "mean"] for s in streams], dtype=float) * 1e5
    h = np.array([means.loc[(s, "enthalpy_kj_kg"), "mean"] for s in streams], dtype=float) * 1e3
    # Mean pressure and enthalpy give one state; a mean entropy beside them would give another.
    state = state_ph(p, h)
    if not state.valid.all():
        return None
    before = np.concatenate([state.entropy[:1], state.entropy[:-1]])
    ideal = state_ps(p, before)
    return pd.DataFrame(
        {
            "label": [gathered.site.streams[s].name or s for s in streams],
            "entropy": state.entropy / 1e3,
            "enthalpy": h / 1e3,
            "pressure": p / 1e5,
            "temperature": state.temperature - 273.15,
            "dryness": state.dryness,
            "ideal_entropy": before / 1e3,
            "ideal_enthalpy": ideal.enthalpy / 1e3,
        }
    )


@cache
def _dome() -> pd.DataFrame:
    """The saturation line: liquid side up, vapour side down."""
    p = np.geomspace(_DOME_FROM, _DOME_TO, 120)
    liquid, vapour = saturated(p)
    return pd.DataFrame(
        {
            "entropy": np.concatenate([liquid.entropy, vapour.entropy[::-1]]) / 1e3,
            "enthalpy": np.concatenate([liquid.enthalpy, vapour.enthalpy[::-1]]) / 1e3,
        }
    )


@cache
def _isobar(pressure_bar: float) -> pd.DataFrame:
    """One line of constant pressure over the enthalpies that a steam turbine meets."""
    h = np.linspace(1900e3, 3550e3, 90)
    state = state_ph(np.full_like(h, pressure_bar * 1e5), h)
    return pd.DataFrame({"entropy": state.entropy / 1e3, "enthalpy": h / 1e3})[state.valid]
