"""The dead-state page's view: the weather, and what it did to the ledger."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from dashboards.views import DeadStateView
from monitor.flags import Flag

if TYPE_CHECKING:
    from monitor.reports.gather import Gathered

__all__ = ["dead_state_view"]

_COMPARED = ("destroyed", "supplied", "lost")


def dead_state_view(gathered: Gathered) -> DeadStateView:
    """Gather the dead-state page."""
    cells = gathered.store.ledger(gathered.start, gathered.end)
    hours = pd.Timedelta(seconds=gathered.site.file.site.interval) / pd.Timedelta(hours=1)
    flag = cells["flag"].to_numpy()
    held = (flag & Flag.DEAD_STATE_HELD) != 0
    hourly = cells.drop(columns="flag").resample("h").mean()
    held_hourly = pd.Series(held, index=cells.index).resample("h").max()
    table = gathered.site.file.dead_state
    names = [f"{key}_{state}" for key in _COMPARED for state in ("live", "reference")]
    ledger = pd.DataFrame({name: hourly[f"{name}_kw"] for name in names}, index=hourly.index)
    return DeadStateView(
        context=gathered.context,
        ambient=gathered.localised(
            pd.DataFrame(
                {
                    "temperature": hourly["t0_degc"],
                    "pressure": hourly["p0_bar"] * 1e3,
                    "held": held_hourly.fillna(0).astype(bool),
                }
            )
        ),
        ledger=gathered.localised(ledger),
        reference_temperature=table.reference_temperature - 273.15,
        reference_pressure=table.reference_pressure / 100.0,
        freezing_hours=float(((flag & Flag.FREEZING) != 0).sum()) * hours,
        held_hours=float(held.sum()) * hours,
        weather_effect=_weather_effect(gathered, cells, hours),
    )


def _weather_effect(gathered: Gathered, cells: pd.DataFrame, hours: float) -> pd.DataFrame:
    """What the live dead state adds to destroyed exergy, week by week of local time."""
    local = gathered.localised(cells)
    weeks = pd.DatetimeIndex(local.index).tz_localize(None).to_period("W-SUN")
    rows = []
    for week, part in local.groupby(weeks):
        both = part[["destroyed_live_kw", "destroyed_reference_kw"]].dropna()
        mwh = both.sum().to_numpy() * hours / 1e3 if len(both) else np.full(2, np.nan)
        rows.append(
            {
                "period": f"week of {pd.Period(week).start_time:%d %b %Y}",
                "t0_mean": float(part["t0_degc"].mean()),
                "destroyed_live_mwh": float(mwh[0]),
                "destroyed_reference_mwh": float(mwh[1]),
                "difference_mwh": float(mwh[0] - mwh[1]),
            }
        )
    columns = [
        "period",
        "t0_mean",
        "destroyed_live_mwh",
        "destroyed_reference_mwh",
        "difference_mwh",
    ]
    return pd.DataFrame(rows, columns=columns)
