"""One look for all pages: the palette, what each colour means, type sizes, a figure's frame."""

from __future__ import annotations

from types import MappingProxyType
from typing import Any

__all__ = [
    "COLOURS",
    "FLOW_COLOURS",
    "FLOW_WORDS",
    "FONT",
    "LEDGER_COLOURS",
    "SIZES",
    "axis",
    "base_layout",
    "tinted",
]

COLOURS = MappingProxyType(
    {
        # Okabe and Ito (2008), the colour-blind-safe set.
        "orange": "#E69F00",
        "sky": "#56B4E9",
        "green": "#009E73",
        "yellow": "#F0E442",
        "blue": "#0072B2",
        "vermilion": "#D55E00",
        "purple": "#CC79A7",
        # Ink and paper.
        "ink": "#1F2A30",
        "soft": "#55636B",
        "faint": "#9AA6AC",
        "hairline": "#D9DFE1",
        "wash": "#F3F5F5",
        "paper": "#FFFFFF",
    }
)

LEDGER_COLOURS = MappingProxyType(
    {
        "supplied": COLOURS["ink"],
        "used": COLOURS["blue"],
        "lost": COLOURS["orange"],
        "destroyed": COLOURS["vermilion"],
        "stored": COLOURS["green"],
        "imbalance": COLOURS["faint"],
    }
)

FLOW_COLOURS = MappingProxyType(
    {
        "water": COLOURS["sky"],
        "fuel": COLOURS["yellow"],
        "power": COLOURS["green"],
        "heat": COLOURS["purple"],
        "destroyed": COLOURS["vermilion"],
        "lost": COLOURS["orange"],
    }
)
FLOW_WORDS = MappingProxyType(
    {
        "fuel": "fuel",
        "water": "steam and water",
        "power": "power",
        "heat": "heat",
        "destroyed": "destroyed",
        "lost": "lost",
    }
)

FONT = (
    'system-ui, "Segoe UI", "Helvetica Neue", "Noto Sans", "Liberation Sans", "DejaVu Sans", '
    "sans-serif"
)

SIZES = MappingProxyType({"small": 12, "body": 14, "lead": 17, "section": 21, "title": 30})
"""The typographic scale in px, each about a fifth or more above the one before."""


def tinted(colour: str, alpha: float) -> str:
    """Return a palette colour with transparency, as plotly and CSS both read it."""
    red, green, blue = (int(colour[i : i + 2], 16) for i in (1, 3, 5))
    return f"rgba({red},{green},{blue},{alpha})"


def axis(**more: Any) -> dict[str, Any]:  # noqa: ANN401 - a plotly axis is a free dictionary
    """Return a figure's axis in the house style, with ``more`` laid over it."""
    return {
        "showline": False,
        "zeroline": False,
        "gridcolor": COLOURS["hairline"],
        "gridwidth": 1,
        "ticks": "",
        "tickfont": {"size": SIZES["small"], "color": COLOURS["soft"]},
        "separatethousands": True,
        "exponentformat": "none",
        "automargin": True,
        **more,
    }


def base_layout(height: int, **more: Any) -> dict[str, Any]:  # noqa: ANN401 - likewise
    """Return a figure's layout in the house style, with ``more`` laid over it."""
    return {
        "height": height,
        "autosize": True,
        "font": {"family": FONT, "size": SIZES["small"], "color": COLOURS["ink"]},
        "paper_bgcolor": "rgba(0,0,0,0)",
        "plot_bgcolor": "rgba(0,0,0,0)",
        # Wide enough for most numbers, so that time axes below one another agree.
        "margin": {"l": 72, "r": 16, "t": 34, "b": 36, "pad": 4},
        "separators": ".\u202f",
        "showlegend": True,
        "legend": {
            "orientation": "h",
            "x": 0,
            "xanchor": "left",
            "y": 1.02,
            "yanchor": "bottom",
            "font": {"size": SIZES["small"]},
            "itemclick": False,
            "itemdoubleclick": False,
        },
        "hoverlabel": {
            "bgcolor": COLOURS["paper"],
            "bordercolor": COLOURS["faint"],
            "font": {"family": FONT, "size": SIZES["small"], "color": COLOURS["ink"]},
            "align": "left",
        },
        "hovermode": "x unified",
        "dragmode": "zoom",
        **more,
    }
