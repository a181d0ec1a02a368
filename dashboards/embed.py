"""Figures into pages: compact JSON that no text inside it can break out of."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from markupsafe import Markup

__all__ = ["Chart", "figure_json"]

_DIGITS = 5  # one more than any page shows
_MILLISECOND = 1_000_000
_SECOND = 1_000_000_000


@dataclass(frozen=True)
class Chart:
    """A figure with what stands around it.

    Attributes:
        id: unique on its page.
        figure: ``data`` and ``layout`` as plotly takes them; arrays and time axes as they are.
        summary: the figure in words, for who cannot see it.
        heading: what stands above; empty where the section's heading says it already.
        note: what stands below; may be empty.
        print_height: px on paper.
    """

    id: str
    figure: dict[str, Any]
    summary: str
    heading: str = ""
    note: str = ""
    print_height: int = 260
    marks: tuple[tuple[str, str], ...] = ()
    """(mark on the figure, what it means) of alarms and events, listed below the figure."""

    @property
    def script(self) -> Markup:
        """The figure as JSON that is safe inside a script element."""
        return figure_json(self.figure)


def figure_json(figure: dict[str, Any]) -> Markup:
    r"""Write a figure as JSON for a ``script`` element of type ``application/json``.

    Times are coded as a start and steps, each distinct axis once, since several lines share one;
    numbers carry five significant digits. Every ``<``, ``>`` and ``&`` and everything beyond ASCII
    is a ``\u`` escape, so that no text ends the element or opens a comment.
    """
    axes: list[dict[str, Any]] = []
    known: dict[bytes, int] = {}
    plain = _plain(figure, axes, known)
    text = json.dumps(
        {"times": axes, "figure": plain}, separators=(",", ":"), ensure_ascii=True, allow_nan=False
    )
    for sign in "<>&":
        text = text.replace(sign, f"\\u{ord(sign):04x}")
    return Markup(text)  # noqa: S704 - the loop above leaves nothing that markup could start with


def _plain(value: Any, axes: list[dict[str, Any]], known: dict[bytes, int]) -> Any:  # noqa: ANN401
    if isinstance(value, dict):
        return {str(key): _plain(item, axes, known) for key, item in value.items()}
    if isinstance(value, (list, tuple, np.ndarray)):
        return [_plain(item, axes, known) for item in value]
    if isinstance(value, pd.DatetimeIndex):
        return {"times": _coded(value, axes, known)}
    if isinstance(value, pd.Timestamp):
        return value.tz_localize(None).strftime("%Y-%m-%d %H:%M:%S")
    if isinstance(value, (float, np.floating)):
        return _number(float(value))
    return value


def _number(value: float) -> float | int | None:
    if not math.isfinite(value):
        return None
    rounded = float(f"{value:.{_DIGITS}g}")
    return int(rounded) if rounded.is_integer() else rounded


def _coded(times: pd.DatetimeIndex, axes: list[dict[str, Any]], known: dict[bytes, int]) -> int:
    stamps = times.to_numpy().astype("datetime64[ns]").astype(np.int64)
    key = stamps.tobytes()
    if key not in known:
        known[key] = len(axes)
        steps = np.diff(stamps) // _SECOND
        axis: dict[str, Any] = {
            "start": int(stamps[0] // _MILLISECOND) if stamps.size else 0,
            "count": int(stamps.size),
        }
        if steps.size:
            even = bool((steps == steps[0]).all())
            axis |= {"step": int(steps[0])} if even else {"steps": steps.tolist()}
        axes.append(axis)
    return known[key]
