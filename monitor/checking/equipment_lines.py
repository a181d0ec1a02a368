"""A line a piece of equipment: how mass and energy close over the day, and what cannot be."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.checking.lines import VERDICTS, Figures, Line, Verdict, number
from monitor.checking.ports import PRESSURE_FALLS, STEAM_PORTS, WATER_PORTS
from monitor.equipment.solve import spare_measurements
from monitor.flags import Flag
from monitor.uncertainty import COVERAGE
from monitor.uncertainty.told import contributions, excess, suspect

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    import pandas as pd

    from monitor.checking.contradictions import Contradiction
    from monitor.equipment.base import Item
    from monitor.figures import Computed
    from monitor.site.load import Site

_RESIDUE = 1e-9
__all__ = ["equipment_lines", "kilowatts"]

IMBALANCE_LOOK, IMBALANCE_WRONG = 0.03, 0.15
"""Shares of what goes in: meters of 1 to 2 % explain the first, nothing but an error the second."""
RISE_LOOK, RISE_WRONG = 0.03, 0.15
"""Rises of absolute pressure where none can be: two gauges explain less than the first."""
FLOWING = 0.1
"""[kg/s] Above it a stream runs; one at rest may stand at any pressure."""
_OFTEN = 0.05
"""Share of cells that contradict the second law from which a person should look."""
_DOUBTFUL = 2.5
"""Multiples of its tolerance from which a contradiction is worth a look by itself."""


def equipment_lines(
    site: Site, window: Computed, contradicted: Sequence[Contradiction]
) -> Iterator[Line]:
    """Tell of every piece of equipment: balances over the day, pressures and phases.

    Args:
        site: the site.
        window: the day's figures, with their uncertainty budgets.
        contradicted: what the day's typical readings say against physics, of size (1,).
    """
    batch, doubts = window.batch, _doubts(contradicted)
    within = {(one.subject, one.what) for one in contradicted if one.size[0] <= 1.0}
    streams = batch.streams.groupby("subject")[["mass_flow_kg_s", "energy_kw"]].mean().abs()
    running = batch.streams[batch.streams["mass_flow_kg_s"] > FLOWING]
    medians = running.groupby("subject")["pressure_bar"].median().dropna()
    bar = {str(stream): float(value) for stream, value in medians.items()}
    wet = running.groupby("subject")["dryness"].median().dropna()
    dryness = {str(stream): float(value) for stream, value in wet.items()}
    for item_id, cells in batch.equipment.groupby("subject", sort=False):
        item = site.items[str(item_id)]
        means = cells.drop(columns=["subject", "time", "flag"]).mean()
        inlets = streams.loc[list(item.ids("in"))].sum()
        shares = {
            "mass_imbalance_share": _share(means["mass_imbalance_kg_s"], inlets["mass_flow_kg_s"]),
            "energy_imbalance_share": _share(means["energy_imbalance_kw"], inlets["energy_kw"]),
            "closure_share": _share(means["closure_live_kw"], means["exergy_in_live_kw"]),
        }
        destroyed, entered = means["destroyed_live_kw"], means["exergy_in_live_kw"]
        found = (
            f"mass {_percent(shares['mass_imbalance_share'])}, energy "
            f"{_percent(shares['energy_imbalance_share'])}, closure "
            f"{_percent(shares['closure_share'])}; destroys {kilowatts(destroyed, entered)} kW"
        )
        u = means["u_destroyed_live_kw"]
        found += f" +/- {kilowatts(COVERAGE * u, entered, 2)} kW" if np.isfinite(u) else ""
        spare = spare_measurements(item)
        found += "".join(
            f"; {balance} balance spare: any one of {', '.join(tags)} could be left to it"
            for balance, tags in spare.items()
        )
        figures: Figures = {k: number(v) for k, v in shares.items()}
        figures |= {f"spare_{balance}": " ".join(tags) for balance, tags in spare.items()}
        figures |= {"destroyed_live_kw": number(destroyed), "exergy_in_live_kw": number(entered)}
        figures |= {"u_destroyed_live_kw": number(u)}
        verdict, reason = _judge_equipment(
            shares, destroyed, entered, {w for i, w in within if i == item.id}
        )
        for told in (_judge_phase(item, dryness), _judge_pressure(item, bar)):
            if told[0] != "ok" and VERDICTS.index(told[0]) >= VERDICTS.index(verdict):
                verdict, reason = told
        if verdict == "ok":
            verdict, reason = _judge_second_law(site, window, item.id, cells)
        if verdict == "ok" and item.id in doubts:
            verdict, reason = "look", doubts[item.id]
        yield Line("equipment", item.id, verdict, found, reason, figures)


def _judge_second_law(
    site: Site, window: Computed, item: str, cells: pd.DataFrame
) -> tuple[Verdict, str]:
    """Whether its readings often contradict the second law, and which one to doubt first."""
    flags = cells["flag"].to_numpy(dtype=np.int64)
    share = float(((flags & Flag.SECOND_LAW) != 0).mean())
    if share <= _OFTEN or window.uncertainties is None:
        return "ok", ""
    reason = f"destroys less than nothing in {_percent(share)} of the day's cells"
    budget = window.uncertainties.destroyed[item]
    destroyed = cells["destroyed_live_kw"].to_numpy(dtype=np.float64)
    worst = int(np.nanargmin(destroyed))
    hour = (int(cells["time"].to_numpy()[worst]) - window.batch.start) // 3600
    lines = contributions(budget, 1e-3, site.tags, hour)
    culprit = suspect(lines, excess(float(destroyed[worst]), "kW"))
    return "look", reason if culprit is None else f"{reason}; {culprit.sentence}"


def _judge_equipment(
    shares: Mapping[str, float], destroyed: float, entered: float, within: set[str]
) -> tuple[Verdict, str]:
    if not np.isfinite(destroyed):
        return "wrong", "its balance cannot be drawn up; see the tags and streams above"
    if destroyed < -0.02 * abs(entered):
        return "wrong", "it seems to create exergy: two streams swapped, or a reading is wrong"
    named = {"mass_imbalance_share": "mass", "energy_imbalance_share": "energy"}
    for key, word in named.items():
        size = abs(shares[key])
        # Small flows in wide meters: what their stated uncertainties explain is no news.
        explained = f"{word} balance" in within and size < IMBALANCE_WRONG
        if np.isfinite(size) and size > IMBALANCE_LOOK and not explained:
            verdict: Verdict = "wrong" if size > IMBALANCE_WRONG else "look"
            kind = "in than out" if shares[key] > 0 else "out than in"
            return (
                verdict,
                f"{_percent(size)} more {word} goes {kind}; a meter, or a missing stream",
            )
    return "ok", ""


def _judge_phase(item: Item, dryness: Mapping[str, float]) -> tuple[Verdict, str]:
    """Whether steam runs where water should, or water where steam should."""
    for port, streams in item.ports.items():
        for stream in streams:
            half = 0.5
            if port in WATER_PORTS and dryness.get(stream, 0.0) > half:
                return "wrong", f"'{stream}' at port {port} is steam; correct its p and T, or tags"
            if port in STEAM_PORTS and dryness.get(stream, 1.0) < half:
                # A user may be heated by hot water; nothing else takes it at its steam port.
                verdict: Verdict = "look" if item.kind.name == "user" else "wrong"
                return verdict, f"'{stream}' at port {port} is water; correct its p and T, or tags"
    return "ok", ""


def _judge_pressure(item: Item, bar: Mapping[str, float]) -> tuple[Verdict, str]:
    """Whether a stream leaves at a higher pressure than anything enters, which needs a pump."""
    if item.kind.name not in PRESSURE_FALLS:
        return "ok", ""
    entering = max((bar[i] for i in item.ids("in") if i in bar), default=float("inf"))
    outlet = max((i for i in item.ids("out") if i in bar), key=lambda i: bar[i], default=None)
    if outlet is None or bar[outlet] <= (1 + RISE_LOOK) * entering:
        return "ok", ""
    return "wrong" if bar[outlet] > (1 + RISE_WRONG) * entering else "look", (
        f"'{outlet}' leaves at {bar[outlet]:.4g} bar(a), above the {entering:.4g} bar(a) of what "
        "enters; correct the unit (gauge for absolute?), the tag, or the streams"
    )


def _share(part: float, whole: float) -> float:
    return float(part / whole) if whole and np.isfinite(whole) else float("nan")


def kilowatts(value: float, entered: float, digits: int = 4) -> str:
    """A rate in so many digits; what sums of doubles leave of what enters is none."""
    if abs(value) <= _RESIDUE * abs(entered):
        return "0"
    text = f"{value:.{digits}g}"
    return f"{float(text):.0f}" if "e+" in text else text


def _percent(share: float) -> str:
    return f"{100 * share:.1f} %" if np.isfinite(share) else "-"


def _doubts(contradicted: Sequence[Contradiction]) -> dict[str, str]:
    """What contradicts itself at each piece of equipment, the worst of it in words."""
    worst: dict[str, Contradiction] = {}
    for one in contradicted:
        size = one.size[0]
        if one.kind != "equipment" or not size > _DOUBTFUL:
            continue
        if one.subject not in worst or size > worst[one.subject].size[0]:
            worst[one.subject] = one
    return {
        subject: f"its readings contradict each other: {one.what} is {one.size[0]:.3g} times what "
        "its meters' uncertainty and usual practice allow"
        for subject, one in worst.items()
    }
