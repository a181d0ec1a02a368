"""Bars of equipment below one another, the most first, with words at their ends."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from dashboards.formats import plotly_text, shorten
from dashboards.theme import COLOURS, SIZES, axis, base_layout

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["end_words", "print_height", "ranking_layout"]

_LABEL = 40


def end_words(ends: Sequence[float], words: Sequence[str]) -> dict[str, Any]:
    """Return the trace that writes a word behind the end of each bar."""
    return {
        "type": "scatter",
        "mode": "text",
        "x": list(ends),
        "y": list(range(len(ends))),
        "text": [f"\u2002{plotly_text(word)}" for word in words],
        "textposition": "middle right",
        "cliponaxis": False,
        "showlegend": False,
        "hoverinfo": "skip",
    }


def ranking_layout(
    names: Sequence[str],
    span: tuple[float, float],
    unit: str,
    **more: Any,  # noqa: ANN401 - a plotly layout is a free dictionary
) -> dict[str, Any]:
    """Return the layout of so many bars over a span of values, with ``more`` laid over it."""
    return base_layout(
        62 + 26 * len(names) + 20,
        hovermode="closest",
        margin={"l": 56, "r": 60, "t": 34, "b": 36, "pad": 4},
        bargap=0.35,
        xaxis=axis(range=list(span), title={"text": unit, "standoff": 6}),
        yaxis=axis(
            autorange="reversed",
            tickmode="array",
            tickvals=list(range(len(names))),
            ticktext=[plotly_text(shorten(name, _LABEL)) for name in names],
            showgrid=False,
            tickfont={"size": SIZES["small"], "color": COLOURS["ink"]},
        ),
        **more,
    )


def print_height(bars: int) -> int:
    """Return a ranking's height on paper [px]."""
    return 62 + 22 * bars + 20
