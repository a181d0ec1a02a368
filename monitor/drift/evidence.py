"""What the store knows about an alarm beside its own chart: cost, and evidence for a verdict."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.drift.judgement import excess
from monitor.drift.verdict import Evidence
from monitor.flags import Flag

if TYPE_CHECKING:
    from monitor.drift.judgement import FigureRule
    from monitor.store.site import SiteStore

__all__ = ["extra_destroyed", "gather"]

_DOUBTFUL = Flag.UNCERTAIN | Flag.BAD | Flag.OUT_OF_RANGE | Flag.TOO_FAST | Flag.SPIKE | Flag.STUCK


def gather(
    store: SiteStore,
    rule: FigureRule,
    reference: tuple[int, int],
    since: int,
    until: int,
    *,
    drifts: bool,
) -> Evidence:
    """Compare a stretch of time with the reference period.

    Args:
        store: the site's figures.
        rule: the figure in question.
        reference: reference period of its baseline, integer UTC seconds on full hours.
        since: start of the stretch, on a full hour.
        until: its end, on a full hour.
        drifts: whether the figure's chart calls for an alarm.
    """
    cells = store.conditions(rule.subject, rule.figure, since, until)
    flags = cells["flag"].to_numpy()
    flags = flags[(flags & int(Flag.OFF)) == 0]
    before = _means(store, rule.subject, *reference)
    now = _means(store, rule.subject, since, until)
    return Evidence(
        judged=True,
        drifts=drifts,
        figure=rule.label,
        doubtful_share=_share(flags, _DOUBTFUL),
        second_law_share=_share(flags, Flag.SECOND_LAW),
        destroyed_live_change=_change(before, now, "destroyed_live_kw"),
        destroyed_reference_change=_change(before, now, "destroyed_reference_kw"),
        load_change=_change(before, now, "load_kg_s"),
        imbalance_change=_imbalance_change(before, now),
    )


def extra_destroyed(
    store: SiteStore,
    rule: FigureRule,
    reference: tuple[int, int],
    since: int,
    until: int,
    least_hours: int,
) -> float:
    """Return how much more exergy [kW] is destroyed than in the reference period.

    At the same load where the figure follows the load; at the reference dead state; mean from
    ``since`` to ``until``; NaN when it cannot be told.
    """
    names = ("destroyed_reference_kw", "load_kg_s")
    rolled = store.rollups(
        "equipment", "hour", reference[0], until, subject=rule.subject, figures=names
    )
    wide = rolled.pivot_table(index="start", columns="figure", values="mean", observed=True)
    wide = wide.reindex(columns=list(names))
    hours = wide.set_axis(["value", "load"], axis=1).reset_index(drop=True)
    hours["hour"] = pd.DatetimeIndex(wide.index).as_unit("s").asi8
    return excess(
        hours, reference, since, until, least_hours=least_hours, follows_load=rule.follows_load
    )


def _share(flags: np.ndarray, bits: Flag) -> float:
    return float(((flags & int(bits)) != 0).mean()) if flags.size else 0.0


def _means(store: SiteStore, subject: str, start: int, end: int) -> dict[str, float]:
    means = store.means("equipment", start, end, subject=subject)["mean"]
    figures = means.index.get_level_values("figure").astype(str)
    return dict(zip(figures.tolist(), means.tolist(), strict=True))


def _change(before: dict[str, float], now: dict[str, float], name: str) -> float | None:
    was, is_now = before.get(name, np.nan), now.get(name, np.nan)
    if not (np.isfinite(was) and np.isfinite(is_now)) or was == 0:
        return None
    return (is_now - was) / abs(was)


def _imbalance_change(before: dict[str, float], now: dict[str, float]) -> float | None:
    shares = [
        means.get("mass_imbalance_kg_s", np.nan) / means["load_kg_s"]
        for means in (before, now)
        if means.get("load_kg_s", 0.0) > 0
    ]
    if len(shares) < 2 or not np.isfinite(shares).all():  # noqa: PLR2004
        return None
    return float(shares[1] - shares[0])
