"""The dead-state page: the weather that the account is drawn against, and what it did."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from dashboards import series
from dashboards.embed import Chart
from dashboards.figures import band_trace, date_axis, has_values, line_traces
from dashboards.files import DEAD_STATE_FILE, write_atomically
from dashboards.formats import duration, fixed, number, power_column
from dashboards.render import render_page
from dashboards.theme import COLOURS, LEDGER_COLOURS, axis, base_layout, tinted

if TYPE_CHECKING:
    from dashboards.views import DeadStateView

__all__ = ["write_dead_state"]

_FREEZING = 0.0  # degC; below it dead-state water is ice Ih
_MEANS = 250  # few enough that the two lines stand apart
_PAIRS = (("destroyed", "Destroyed"), ("lost", "Lost"), ("supplied", "Supplied"))


def write_dead_state(view: DeadStateView, folder: Path) -> Path:
    """Write the dead-state page.

    Args:
        view: what to draw.
        folder: where the pages are; made if it is not there.

    Returns:
        The page's path.

    Raises:
        PageError: the folder cannot be written, or an equipment id cannot name a page.
    """
    content = render_page(
        "dead-state.html",
        view.context,
        view=view,
        temperature=_ambient_chart(
            view,
            "temperature",
            "degC",
            view.reference_temperature,
            "Ambient temperature T₀, °C",
        ),
        pressure=_ambient_chart(
            view, "pressure", "mbar", view.reference_pressure, "Ambient pressure p₀, mbar"
        ),
        ledgers=[chart for pair in _PAIRS if (chart := _pair_chart(view, *pair)) is not None],
        effect=list(view.weather_effect.itertuples(index=False)),
    )
    return write_atomically(Path(folder) / DEAD_STATE_FILE, content)


def _ambient_chart(
    view: DeadStateView, name: str, unit: str, reference: float, heading: str
) -> Chart | None:
    if not has_values(view.ambient, name):
        return None
    table = series.local(view.ambient.astype("float64"))
    table = series.thinned(table, name)
    times = pd.DatetimeIndex(table.index)
    values = table[name].to_numpy(dtype=np.float64)
    held = np.nan_to_num(table["held"].to_numpy(dtype=np.float64)) > 0.0
    ends = np.array([times.min(), times.max()])
    traces: list[dict[str, Any]] = []
    if name == "temperature" and bool((values < _FREEZING).any()):
        icy = np.where(values < _FREEZING, values, np.nan)
        zero = np.full_like(icy, _FREEZING)
        shade = tinted(COLOURS["sky"], 0.45)
        traces.append(band_trace(times, icy, zero, "Below freezing", shade))
    traces.append(
        {
            "type": "scatter",
            "mode": "lines",
            "x": pd.DatetimeIndex(ends),
            "y": [reference, reference],
            "name": "Reference dead state",
            "line": {"color": COLOURS["soft"], "width": 1.4, "dash": "5px,3px"},
            "hoverinfo": "skip",
        }
    )
    traces += line_traces(times, values, "Ambient", unit, {"color": COLOURS["blue"], "width": 1.6})
    layout = base_layout(
        240,
        xaxis=date_axis(times),
        yaxis=axis(title={"text": "°C" if unit == "degC" else unit, "standoff": 8}),
        shapes=[_held_shape(times, start, stop) for start, stop in series.stretches(held)],
    )
    known = values[np.isfinite(values)]
    summary = (
        f"{heading}: lowest {fixed(float(known.min()), unit, 1)}, "
        f"highest {fixed(float(known.max()), unit, 1)}, reference {fixed(reference, unit, 1)}."
    )
    note = "Orange spans: the reading is held, or the reference stands in." if held.any() else ""
    return Chart(f"ambient-{name}", {"data": traces, "layout": layout}, summary, heading, note, 200)


def _held_shape(times: pd.DatetimeIndex, start: int, stop: int) -> dict[str, Any]:
    return {
        "type": "rect",
        "xref": "x",
        "yref": "paper",
        "x0": times[start],
        "x1": times[min(stop, len(times) - 1)],
        "y0": 0,
        "y1": 1,
        "layer": "below",
        # A thin edge keeps a single held hour visible on a span of months.
        "line": {"width": 1, "color": tinted(COLOURS["orange"], 0.5)},
        "fillcolor": tinted(COLOURS["orange"], 0.22),
    }


def _pair_chart(view: DeadStateView, key: str, label: str) -> Chart | None:
    live, reference = f"{key}_live", f"{key}_reference"
    if not has_values(view.ledger, live, reference):
        return None
    means, step = series.regular_means(view.ledger[[live, reference]], _MEANS)
    scale = power_column(means.to_numpy(dtype=np.float64).ravel().tolist())
    clock = series.local(means * scale.factor)
    times = pd.DatetimeIndex(clock.index)
    colour = LEDGER_COLOURS[key]
    traces = line_traces(
        times,
        clock[reference].to_numpy(dtype=np.float64),
        "at the reference dead state",
        scale.unit,
        {"color": COLOURS["soft"], "width": 1.4, "dash": "5px,3px"},
    ) + line_traces(
        times,
        clock[live].to_numpy(dtype=np.float64),
        "at the live dead state",
        scale.unit,
        {"color": colour, "width": 1.8},
    )
    layout = base_layout(
        230, xaxis=date_axis(times), yaxis=axis(title={"text": scale.unit, "standoff": 8})
    )
    both = (
        number(float(means[name].mean()) * scale.factor) if has_values(means, name) else "unknown"
        for name in (live, reference)
    )
    live_words, reference_words = both
    return Chart(
        f"pair-{key}",
        {"data": traces, "layout": layout},
        f"{label} exergy, mean {live_words} {scale.unit} at the live and {reference_words} "
        f"{scale.unit} at the reference dead state.",
        f"{label} exergy, {scale.unit}",
        f"Means over {duration(step)}.",
        print_height=190,
    )
