"""The expansion line of a turbine on the enthalpy-entropy (Mollier) chart."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from dashboards.embed import Chart
from dashboards.formats import number, plotly_text, quantity, shorten
from dashboards.theme import COLOURS, SIZES, axis, base_layout, tinted

if TYPE_CHECKING:
    import pandas as pd

    from dashboards.views import ExpansionView

__all__ = ["expansion_chart"]

_ENTROPY = "kJ/(kg K)"
_ENTHALPY = "kJ/kg"


def expansion_chart(view: ExpansionView) -> Chart | None:
    """Draw measured states, ideal end states, the baseline's expansion, dome and isobars.

    Returns:
        The chart, or None when no state is known.
    """
    points = view.points
    known = points[
        np.isfinite(_column(points, "entropy")) & np.isfinite(_column(points, "enthalpy"))
    ]
    if known.empty:
        return None
    window = _window(view, known)
    traces = [
        _dome(_clipped(view.dome, window)),
        *(_isobar(label, _clipped(line, window)) for label, line in view.isobars),
    ]
    if view.baseline_points is not None:
        traces += _baseline(view.baseline_points)
    traces += [_ideal(points), _ideal_ends(points), _measured(known)]
    layout = base_layout(
        480,
        hovermode="closest",
        xaxis=axis(title={"text": f"entropy, {_ENTROPY}", "standoff": 8}, range=window[0]),
        yaxis=axis(title={"text": f"enthalpy, {_ENTHALPY}", "standoff": 8}, range=window[1]),
        annotations=_isobar_labels(view, window),
    )
    return Chart(
        "expansion",
        {"data": traces, "layout": layout},
        _words(known),
        note=(
            "Dotted lines go straight down to the ideal (isentropic) end of each section; the "
            "further right a measured state lies from it, the more work was lost."
        ),
        print_height=330,
    )


def _column(table: pd.DataFrame, name: str) -> Any:  # noqa: ANN401 - a float array
    return table[name].to_numpy(dtype=np.float64)


def _window(view: ExpansionView, known: pd.DataFrame) -> tuple[list[float], list[float]]:
    tables = [known] if view.baseline_points is None else [known, view.baseline_points]
    entropy = np.concatenate(
        [_column(table, name) for table in tables for name in ("entropy", "ideal_entropy")]
    )
    enthalpy = np.concatenate(
        [_column(table, name) for table in tables for name in ("enthalpy", "ideal_enthalpy")]
    )
    s_low, s_high = float(np.nanmin(entropy)), float(np.nanmax(entropy))
    h_low, h_high = float(np.nanmin(enthalpy)), float(np.nanmax(enthalpy))
    wide, tall = max(s_high - s_low, 0.2), max(h_high - h_low, 150.0)
    # Room on the right for the states' labels.
    return (
        [s_low - 0.25 * wide, s_high + 0.8 * wide],
        [h_low - 0.15 * tall, h_high + 0.15 * tall],
    )


def _clipped(table: pd.DataFrame, window: tuple[list[float], list[float]]) -> pd.DataFrame:
    """Keep the part of a line that the chart shows, and a point beyond each end of it."""
    (s_low, s_high), (h_low, h_high) = window
    entropy, enthalpy = _column(table, "entropy"), _column(table, "enthalpy")
    inside = (entropy > s_low) & (entropy < s_high) & (enthalpy > h_low) & (enthalpy < h_high)
    seen = np.flatnonzero(inside)
    if seen.size == 0:
        return table.iloc[:0]
    return table.iloc[max(seen[0] - 1, 0) : seen[-1] + 2]


def _dome(dome: pd.DataFrame) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines",
        "x": _column(dome, "entropy"),
        "y": _column(dome, "enthalpy"),
        "name": "saturation line",
        "line": {"color": COLOURS["ink"], "width": 1.4},
        "hoverinfo": "skip",
    }


def _isobar(label: str, table: pd.DataFrame) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines",
        "x": _column(table, "entropy"),
        "y": _column(table, "enthalpy"),
        "name": plotly_text(label),
        "line": {"color": tinted(COLOURS["faint"], 0.8), "width": 1},
        "hoverinfo": "skip",
        "showlegend": False,
    }


def _isobar_labels(
    view: ExpansionView, window: tuple[list[float], list[float]]
) -> list[dict[str, Any]]:
    """Put each isobar's label where it leaves the chart at the top or the right."""
    labels: list[dict[str, Any]] = []
    (s_low, s_high), (h_low, h_high) = window
    for label, table in view.isobars:
        entropy, enthalpy = _column(table, "entropy"), _column(table, "enthalpy")
        inside = (entropy > s_low) & (entropy < s_high) & (enthalpy > h_low) & (enthalpy < h_high)
        seen = np.flatnonzero(inside)
        if seen.size == 0:
            continue
        last = seen[-1]
        after = min(last + 1, len(entropy) - 1)
        s, h = _leaving(
            (entropy[last], enthalpy[last]), (entropy[after], enthalpy[after]), s_high, h_high
        )
        at_top = (h_high - h) / (h_high - h_low) < (s_high - s) / (s_high - s_low)
        labels.append(
            {
                "x": s,
                "y": h,
                "xref": "x",
                "yref": "y",
                "text": plotly_text(shorten(label, 16)),
                "showarrow": False,
                "xanchor": "right",
                "yanchor": "top" if at_top else "bottom",
                "font": {"size": 11, "color": COLOURS["soft"]},
                "bgcolor": tinted(COLOURS["paper"], 0.8),
            }
        )
    return labels


def _leaving(
    inner: tuple[float, float], outer: tuple[float, float], s_high: float, h_high: float
) -> tuple[float, float]:
    """Cut the step from inside to outside at the chart's edge."""
    parts = [1.0]
    for place, edge in ((0, s_high), (1, h_high)):
        if outer[place] > edge:
            parts.append((edge - inner[place]) / (outer[place] - inner[place]))
    part = min(parts)
    return (
        inner[0] + part * (outer[0] - inner[0]),
        inner[1] + part * (outer[1] - inner[1]),
    )


def _baseline(points: pd.DataFrame) -> list[dict[str, Any]]:
    return [
        {
            "type": "scatter",
            "mode": "lines+markers",
            "x": _column(points, "entropy"),
            "y": _column(points, "enthalpy"),
            "name": "reference period",
            "line": {"color": COLOURS["faint"], "width": 3},
            "marker": {"size": 8, "symbol": "square", "color": COLOURS["faint"]},
            "text": [plotly_text(str(label)) for label in points["label"]],
            "hovertemplate": "reference period: %{text}<br>%{y:,.4~r} kJ/kg<extra></extra>",
        }
    ]


def _ideal(points: pd.DataFrame) -> dict[str, Any]:
    entropy, enthalpy = _column(points, "entropy"), _column(points, "enthalpy")
    end_s, end_h = _column(points, "ideal_entropy"), _column(points, "ideal_enthalpy")
    gap = np.full(max(len(points) - 1, 0), np.nan)
    return {
        "type": "scatter",
        "mode": "lines",
        "x": np.column_stack([entropy[:-1], end_s[1:], gap]).ravel(),
        "y": np.column_stack([enthalpy[:-1], end_h[1:], gap]).ravel(),
        "name": "ideal (isentropic)",
        "line": {"color": COLOURS["green"], "width": 1.6, "dash": "dot"},
        "hoverinfo": "skip",
    }


def _ideal_ends(points: pd.DataFrame) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "markers",
        "x": _column(points, "ideal_entropy"),
        "y": _column(points, "ideal_enthalpy"),
        "name": "ideal end",
        "showlegend": False,
        "marker": {"size": 8, "symbol": "diamond-open", "color": COLOURS["green"]},
        "text": [plotly_text(str(label)) for label in points["label"]],
        "hovertemplate": "ideal end: %{text}<br>%{y:,.4~r} kJ/kg<extra></extra>",
    }


def _state_words(row: Any) -> str:  # noqa: ANN401 - a named tuple of the table's columns
    words = [quantity(row.pressure, "bar(a)", 3)]
    wet = np.isfinite(row.dryness) and 0.0 <= row.dryness < 1.0
    words.append(f"x {number(row.dryness, 3)}" if wet else quantity(row.temperature, "degC", 3))
    return ", ".join(words)


def _measured(known: pd.DataFrame) -> dict[str, Any]:
    return {
        "type": "scatter",
        "mode": "lines+markers+text",
        "x": _column(known, "entropy"),
        "y": _column(known, "enthalpy"),
        "name": "measured",
        "line": {"color": COLOURS["blue"], "width": 2.4},
        "marker": {"size": 9, "color": COLOURS["blue"]},
        "text": [
            plotly_text(f"\u2002\u2002{shorten(str(row.label), 28)}: {_state_words(row)}")
            for row in known.itertuples()
        ],
        # The last label stands below the line, clear of the reference period's last state.
        "textposition": ["middle right"] * (len(known) - 1) + ["bottom right"],
        "textfont": {"size": SIZES["small"], "color": COLOURS["ink"]},
        "hovertemplate": "%{text}<br>%{y:,.4~r} kJ/kg, %{x:.4~r} kJ/(kg K)<extra></extra>",
    }


def _words(known: pd.DataFrame) -> str:
    states = "; ".join(
        f"{row.label} {_state_words(row)}, {quantity(float(str(row.enthalpy)), _ENTHALPY)}"
        for row in known.itertuples()
    )
    return f"Expansion line on the enthalpy-entropy chart: {states}."
