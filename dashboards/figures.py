"""The figures that more than one page draws: the ledger over time, trends and control charts."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from dashboards import series
from dashboards.embed import Chart
from dashboards.formats import (
    duration,
    moment,
    number,
    plotly_text,
    power_column,
    quantity,
    shorten,
    unit_text,
)
from dashboards.theme import COLOURS, LEDGER_COLOURS, axis, base_layout, tinted

if TYPE_CHECKING:
    from collections.abc import Sequence

    import numpy.typing as npt

    from dashboards.views import ResidualView, TrendView

    Floats = npt.NDArray[np.float64]

__all__ = [
    "band_trace",
    "date_axis",
    "has_values",
    "ledger_trend",
    "line_traces",
    "residual_chart",
    "trend_chart",
]

_STACKED = (("used", "Used"), ("lost", "Lost"), ("destroyed", "Destroyed"))
_DAY_MS = 86_400_000
_DATE_TICKS = [
    {"dtickrange": [None, _DAY_MS - 1], "value": "%H:%M\n%-d %b %Y"},
    {"dtickrange": [_DAY_MS, "M1"], "value": "%-d %b\n%Y"},
    {"dtickrange": ["M1", "M12"], "value": "%b\n%Y"},
    {"dtickrange": ["M12", None], "value": "%Y"},
]
_TAIL = 0.01  # of a trend's values at either end that need not be in the picture
_ROOM = 0.15  # of the range, above and below
_SQUEEZED = 1.25  # a whole range so much larger than the robust one squeezes the figure
_CROWDED = 0.025  # marks closer than this part of the axis share one label


def has_values(table: pd.DataFrame, *columns: str) -> bool:
    """Tell whether any of the columns holds a number."""
    present = [name for name in columns if name in table.columns]
    return bool(present) and bool(np.isfinite(_floats(table[present])).any())


def _floats(values: pd.DataFrame | pd.Series) -> Floats:
    return values.to_numpy(dtype=np.float64)


def date_axis(times: pd.DatetimeIndex, **more: Any) -> dict[str, Any]:  # noqa: ANN401
    """Return a time axis that covers the points, an hour about a single one."""
    first, last = times.min(), times.max()
    if first == last:
        margin = pd.Timedelta(hours=1)
        first, last = first - margin, last + margin
    return axis(
        type="date",
        range=[first, last],
        hoverformat="%-d %b %Y %H:%M",
        tickformatstops=_DATE_TICKS,
        **more,
    )


def band_trace(
    times: pd.DatetimeIndex,
    low: Floats,
    high: Floats,
    name: str,
    colour: str,
) -> dict[str, Any]:
    """Return the area between two lines, with gaps where either is missing."""
    xs, ys = series.band(times, low, high)
    return {
        "type": "scatter",
        "mode": "lines",
        "x": xs,
        "y": ys,
        "fill": "toself",
        "fillcolor": colour,
        "line": {"width": 0, "color": colour},
        "hoverinfo": "skip",
        "name": name,
    }


def line_traces(
    times: pd.DatetimeIndex,
    values: Floats,
    name: str,
    unit: str,
    line: dict[str, Any],
) -> list[dict[str, Any]]:
    """Return a line with gaps, and dots for the points that stand between two gaps."""
    shown = plotly_text(unit_text(unit))
    hover = f"%{{y:,.4~r}} {shown}" if shown else "%{y:,.4~r}"
    traces: list[dict[str, Any]] = [
        {
            "type": "scatter",
            "mode": "lines",
            "x": times,
            "y": values,
            "name": name,
            "line": line,
            "connectgaps": False,
            "hovertemplate": hover,
        }
    ]
    alone = series.isolated(values)
    if alone.any():
        traces.append(
            {
                "type": "scatter",
                "mode": "markers",
                "x": times[alone],
                "y": values[alone],
                "name": name,
                "marker": {"size": 6, "color": line["color"]},
                "showlegend": False,
                "hoverinfo": "skip",
            }
        )
    return traces


def ledger_trend(table: pd.DataFrame, identifier: str = "ledger-trend") -> Chart | None:
    """Draw where supplied exergy went, stacked, below the line of what was supplied.

    Args:
        table: as ``OverviewView.ledger_trend``, kW.
        identifier: the figure's id on its page.

    Returns:
        The chart, or None when there is nothing to draw.
    """
    names = ["supplied", *(key for key, _ in _STACKED)]
    if not has_values(table, *names):
        return None
    means, step = series.regular_means(table[names])
    # The unit follows the largest value that is drawn, as in a table.
    scale = power_column(_floats(means).ravel().tolist())
    clock = series.local(means * scale.factor)
    starts = pd.DatetimeIndex(clock.index)
    times = _step_times(starts, step)
    stack = np.cumsum(_floats(clock[[key for key, _ in _STACKED]]), axis=1)
    lower = np.zeros(len(clock))
    traces: list[dict[str, Any]] = []
    for number_, (key, label) in enumerate(_STACKED):
        upper = stack[:, number_]
        area = band_trace(
            times, np.repeat(lower, 2), np.repeat(upper, 2), label, LEDGER_COLOURS[key]
        )
        area["fillcolor"] = tinted(LEDGER_COLOURS[key], 0.75)
        hover = {
            "type": "scatter",
            "mode": "lines",
            "x": starts,
            "y": upper,
            "customdata": _floats(clock[key]),
            "hovertemplate": f"%{{customdata:,.4~r}} {scale.unit}",
            "line": {"width": 0, "color": LEDGER_COLOURS[key]},
            "name": label,
            "showlegend": False,
        }
        traces += [area, hover]
        lower = upper
    supplied = np.repeat(_floats(clock["supplied"]), 2)
    traces += line_traces(
        times, supplied, "Supplied", scale.unit, {"color": COLOURS["ink"], "width": 1.8}
    )
    layout = base_layout(
        340,
        xaxis=date_axis(times),
        yaxis=axis(title={"text": scale.unit, "standoff": 8}, rangemode="tozero"),
    )
    means_text = ", ".join(
        f"{label.lower()} {scale.with_unit(float(np.nanmean(_floats(means[key]))))}"
        for key, label in (("supplied", "Supplied"), *_STACKED)
        if has_values(means, key)
    )
    return Chart(
        identifier,
        {"data": traces, "layout": layout},
        f"Ledger over time. Means over what is shown: {means_text}.",
        note=f"Means over {duration(step)} at the live dead state. A gap: a figure is missing.",
    )


def _step_times(starts: pd.DatetimeIndex, step: pd.Timedelta) -> pd.DatetimeIndex:
    """Return each step's start and end: a mean holds for all of its step."""
    both = np.column_stack([starts.to_numpy(), (starts + step).to_numpy()])
    return pd.DatetimeIndex(both.ravel())


def trend_chart(trend: TrendView, identifier: str) -> Chart | None:
    """Draw one figure over time, with what is expected and the limits about it.

    Returns:
        The chart, or None when no value is a number.
    """
    if not has_values(trend.data, "value"):
        return None
    table = series.thinned(series.local(trend.data), "value")
    times = pd.DatetimeIndex(table.index)
    traces: list[dict[str, Any]] = []
    if has_values(table, "low") and has_values(table, "high"):
        low, high = _floats(table["low"]), _floats(table["high"])
        traces.append(band_trace(times, low, high, "Limits", tinted(COLOURS["faint"], 0.2)))
    shown, note = _trend_range(trend)
    if _extremes_fit(table, shown):
        low, high = _floats(table["minimum"]), _floats(table["maximum"])
        shade = tinted(COLOURS["sky"], 0.4)
        traces.append(band_trace(times, low, high, "Lowest to highest", shade))
    if has_values(table, "expected"):
        traces += line_traces(
            times,
            _floats(table["expected"]),
            "Expected from the baseline",
            trend.unit,
            {"color": COLOURS["soft"], "width": 1.5, "dash": "5px,3px"},
        )
    traces += line_traces(
        times,
        _floats(table["value"]),
        plotly_text(shorten(trend.label, 48)),
        trend.unit,
        {"color": COLOURS["blue"], "width": 1.6},
    )
    more: dict[str, Any] = {} if shown is None else {"range": list(shown)}
    if shown is not None:
        traces.append(_outside_marks(times, _floats(table["value"]), shown))
    layout = base_layout(
        250,
        xaxis=date_axis(times),
        yaxis=axis(title={"text": plotly_text(unit_text(trend.unit)), "standoff": 8}, **more),
    )
    return Chart(
        identifier,
        {"data": traces, "layout": layout},
        _trend_words(trend),
        heading=_with_unit(trend.title, trend.unit),
        note=note,
        print_height=210,
    )


def _extremes_fit(table: pd.DataFrame, shown: tuple[float, float] | None) -> bool:
    """Tell whether lowest and highest values frame a line, or would only flood its chart."""
    if not (has_values(table, "minimum") and has_values(table, "maximum")):
        return False
    widths = _floats(table["maximum"]) - _floats(table["minimum"])
    values = _floats(table["value"])
    low, high = (np.nanmin(values), np.nanmax(values)) if shown is None else shown
    return bool(np.nanmedian(widths) <= max(high - low, 0.0)) or high <= low


def _trend_range(trend: TrendView) -> tuple[tuple[float, float] | None, str]:
    framed = [name for name in ("expected", "low", "high") if has_values(trend.data, name)]
    return _robust_range(trend.data["value"], [trend.data[name] for name in framed], trend.unit)


def _robust_range(
    points: pd.Series, beside: Sequence[pd.Series], unit: str
) -> tuple[tuple[float, float] | None, str]:
    """Return the range that shows all but a few outliers, and what is said about these.

    A stop or a start of minutes would otherwise press months of a figure into a flat line. None
    where all values fit a range of much the same size.
    """
    values = _floats(points.dropna())
    lines = [values, *(_floats(line.dropna()) for line in beside)]
    low = min(float(np.quantile(line, _TAIL)) for line in lines)
    high = max(float(np.quantile(line, 1.0 - _TAIL)) for line in lines)
    margin = _ROOM * (high - low)
    low, high = low - margin, high + margin
    if values.max() - values.min() <= _SQUEEZED * (high - low) or high <= low:
        return None, ""
    outside = (values < low) | (values > high)
    far = values[outside]
    extremes = [far.min()] if far.max() < low else [far.max()]
    if far.min() < low and far.max() > high:
        extremes = [far.min(), far.max()]
    words = " and ".join(quantity(float(value), unit, 3) for value in extremes)
    share = f"{int(outside.sum())} of {len(values)} values lie outside what is shown"
    return (low, high), f"{share} (triangles at the edge), as far as {words}."


def _outside_marks(
    times: pd.DatetimeIndex, values: Floats, shown: tuple[float, float]
) -> dict[str, Any]:
    low, high = shown
    outside = (values < low) | (values > high)
    edge = 0.03 * (high - low)
    below = values[outside] < low
    return {
        "type": "scatter",
        "mode": "markers",
        "x": times[outside],
        "y": np.where(below, low + edge, high - edge),
        "name": "Outside what is shown",
        "showlegend": False,
        "hoverinfo": "skip",
        "marker": {
            "size": 7,
            "symbol": np.where(below, "triangle-down", "triangle-up").tolist(),
            "color": COLOURS["vermilion"],
        },
    }


def _opened(label: str) -> str:
    """Begin with a capital, and leave the rest (UA, HP) alone."""
    return label[:1].upper() + label[1:]


def _with_unit(title: str, unit: str) -> str:
    shown = unit_text(unit)
    return f"{title}, {shown}" if shown else title


def _trend_words(trend: TrendView) -> str:
    values = trend.data["value"].dropna()
    last = values.iloc[-1]
    words = (
        f"{trend.title}: {len(values)} values, lowest {quantity(float(values.min()), trend.unit)}, "
        f"highest {quantity(float(values.max()), trend.unit)}, "
        f"last {quantity(float(last), trend.unit)} at {moment(values.index[-1])}"
    )
    if not has_values(trend.data, "expected"):
        return f"{words}; no baseline yet."
    expected = trend.data["expected"].dropna().iloc[-1]
    return f"{words}; last expected {quantity(float(expected), trend.unit)}."


def residual_chart(view: ResidualView, identifier: str) -> Chart | None:
    """Draw a control chart: residuals, their EWMA, its limits, and what happened when.

    Returns:
        The chart, or None when nothing was judged.
    """
    if not has_values(view.data, "ewma", "residual"):
        return None
    table = series.thinned(series.local(view.data), "residual")
    times = pd.DatetimeIndex(table.index)
    low, high = _floats(table["low"]), _floats(table["high"])
    traces = [band_trace(times, low, high, "Limits of the EWMA", tinted(COLOURS["faint"], 0.28))]
    traces.append(
        {
            "type": "scatter",
            "mode": "markers",
            "x": times,
            "y": _floats(table["residual"]),
            "name": "Residual",
            "marker": {"size": 3, "color": tinted(COLOURS["blue"], 0.35)},
            "hoverinfo": "skip",
        }
    )
    ewma = {"color": COLOURS["blue"], "width": 2}
    traces += line_traces(times, _floats(table["ewma"]), "EWMA of the residual", view.unit, ewma)
    marks = _marks(view)
    inside = [mark for mark in marks if times.min() <= mark[0] <= times.max()]
    shown, outside = _residual_range(view)
    more: dict[str, Any] = {} if shown is None else {"range": list(shown)}
    if shown is not None:
        traces.append(_outside_marks(times, _floats(table["residual"]), shown))
    layout = base_layout(
        300,
        xaxis=date_axis(times),
        yaxis=axis(
            **more,
            title={"text": plotly_text(unit_text(view.unit)), "standoff": 8},
            zeroline=True,
            zerolinecolor=COLOURS["soft"],
            zerolinewidth=1,
        ),
        shapes=[
            *_reference_shape(view, times),
            *(_mark_line(time, name) for time, name, _ in inside),
        ],
        annotations=_mark_labels([(time, name) for time, name, _ in inside], times),
    )
    layout["margin"]["t"] = 52
    layout["legend"]["y"] = 1.09
    return Chart(
        identifier,
        {"data": traces, "layout": layout},
        _residual_words(view),
        heading=_with_unit(f"{_opened(view.label)}: measured minus expected", view.unit),
        note=f"{outside} {_reference_words(view)}".strip(),
        marks=tuple((name, f"{moment(time)}: {words}") for time, name, words in marks),
    )


def _residual_range(view: ResidualView) -> tuple[tuple[float, float] | None, str]:
    """Let single residuals lie outside, but never the smoothed line nor its limits."""
    if not has_values(view.data, "residual"):
        return None, ""
    lines = [view.data[name] for name in ("ewma", "low", "high") if has_values(view.data, name)]
    shown, words = _robust_range(view.data["residual"], lines, view.unit)
    if shown is None:
        return None, ""
    whole = np.concatenate([_floats(line.dropna()) for line in lines] or [np.array(shown)])
    low, high = min(shown[0], float(whole.min())), max(shown[1], float(whole.max()))
    if (low, high) != shown:
        residuals = _floats(view.data["residual"].dropna())
        outside = int(((residuals < low) | (residuals > high)).sum())
        words = f"{outside} of {len(residuals)} residuals lie outside what is shown (triangles)."
        return ((low, high), words) if outside else (None, "")
    return shown, words.replace(" values ", " residuals ")


def _marks(view: ResidualView) -> list[tuple[pd.Timestamp, str, str]]:
    alarms = [
        (time.tz_localize(None), f"A{place}", words)
        for place, (time, words) in enumerate(view.alarms, start=1)
    ]
    events = [
        (event.time.tz_localize(None), f"E{place}", f"{event.kind}. {event.note}".strip())
        for place, event in enumerate(view.events, start=1)
    ]
    return sorted(alarms + events, key=lambda mark: (mark[0], mark[1]))


def _mark_line(time: pd.Timestamp, name: str) -> dict[str, Any]:
    is_alarm = name.startswith("A")
    colour = COLOURS["vermilion"] if is_alarm else COLOURS["green"]
    return {
        "type": "line",
        "xref": "x",
        "yref": "paper",
        "x0": time,
        "x1": time,
        "y0": 0,
        "y1": 1,
        "line": {"color": colour, "width": 1.5, "dash": "solid" if is_alarm else "4px,3px"},
    }


def _mark_labels(
    marks: Sequence[tuple[pd.Timestamp, str]], times: pd.DatetimeIndex
) -> list[dict[str, Any]]:
    whole = max(times.max() - times.min(), pd.Timedelta(seconds=1))
    groups: list[list[tuple[pd.Timestamp, str]]] = []
    for mark in marks:
        if groups and (mark[0] - groups[-1][0][0]) / whole < _CROWDED:
            groups[-1].append(mark)
        else:
            groups.append([mark])
    return [
        {
            "xref": "x",
            "yref": "paper",
            "x": group[0][0],
            "y": 1.0,
            "yanchor": "bottom",
            "text": _joined([name for _, name in group]),
            "showarrow": False,
            "font": {"size": 11, "color": COLOURS["ink"]},
        }
        for group in groups
    ]


def _joined(names: Sequence[str]) -> str:
    few = 3
    return ", ".join(names) if len(names) <= few else f"{names[0]} … {names[-1]}"


def _reference_shape(view: ResidualView, times: pd.DatetimeIndex) -> list[dict[str, Any]]:
    if view.reference is None:
        return []
    start, end = (time.tz_localize(None) for time in view.reference)
    start, end = max(start, times.min()), min(end, times.max())
    if start >= end:
        return []
    return [
        {
            "type": "rect",
            "xref": "x",
            "yref": "paper",
            "x0": start,
            "x1": end,
            "y0": 0,
            "y1": 1,
            "layer": "below",
            "line": {"width": 0},
            "fillcolor": tinted(COLOURS["green"], 0.1),
        }
    ]


def _reference_words(view: ResidualView) -> str:
    if view.reference is None:
        return view.design
    start, end = view.reference
    return f"{view.design} Reference period (green): {moment(start)} to {moment(end)}.".strip()


def _residual_words(view: ResidualView) -> str:
    smooth = view.data["ewma"].dropna()
    if smooth.empty:
        return f"{view.label}: residuals without a smoothed value yet."
    low, high = (view.data[side].dropna() for side in ("low", "high"))
    limits = (
        f"limits {number(float(low.iloc[-1]))} to {quantity(float(high.iloc[-1]), view.unit)}"
        if len(low) and len(high)
        else "no limits"
    )
    return (
        f"Control chart of {view.label}: last smoothed residual "
        f"{quantity(float(smooth.iloc[-1]), view.unit)} at {moment(smooth.index[-1])}, {limits}; "
        f"{len(view.alarms)} alarms and {len(view.events)} events in it."
    )
