"""A first verdict: is it the machine, an instrument, the weather, or only the load?

Simple evidence, weighed in an order that an engineer would defend: an instrument in doubt is looked
at before a machine is opened, and a machine is blamed only on a figure that weather and load have
been taken out of.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

__all__ = ["Cause", "Evidence", "Verdict", "verdict"]

Cause = Literal["machine", "instrument", "weather", "load", "unknown"]

_DOUBTFUL = 0.2
"""A share of doubtful readings from which the figure cannot be trusted."""
_CHANGE = 0.05
"""A relative change of destroyed exergy or load worth explaining."""
_IMBALANCE = 0.02
"""A change of the mass or energy imbalance, as a share of throughput, that speaks of a meter."""


@dataclass(frozen=True)
class Evidence:
    """What is known about one figure of one piece of equipment, now against its reference.

    Attributes:
        judged: the figure has a baseline and enough good hours.
        drifts: the figure's chart calls for an alarm.
        figure: its name for a person.
        doubtful_share: share of recent grid cells whose readings behind the figure are uncertain,
            bad or out of range, 0 to 1.
        second_law_share: share of recent cells that contradict the second law, 0 to 1.
        doubtful_tags: names of the tags most in doubt.
        destroyed_live_change: destroyed exergy at the live dead state, relative to the reference
            period; None when not known. Likewise the next two.
        destroyed_reference_change: at the fixed reference dead state.
        load_change: load.
        imbalance_change: change of the mass or energy imbalance since the reference period, as a
            share of the throughput.
    """

    judged: bool
    drifts: bool
    figure: str = "the condition figure"
    doubtful_share: float = 0.0
    second_law_share: float = 0.0
    doubtful_tags: tuple[str, ...] = ()
    destroyed_live_change: float | None = None
    destroyed_reference_change: float | None = None
    load_change: float | None = None
    imbalance_change: float | None = None


@dataclass(frozen=True)
class Verdict:
    """The most likely cause, and why, in sentences for a person."""

    cause: Cause
    reasons: tuple[str, ...]


def verdict(evidence: Evidence) -> Verdict:
    """Weigh the evidence; ``unknown`` when nothing changed or nothing explains it."""
    for rule in (_instrument, _not_judged, _machine, _load, _weather, _doubtful):
        found = rule(evidence)
        if found is not None:
            return found
    changed = _changed(evidence.destroyed_live_change) or _changed(
        evidence.destroyed_reference_change
    )
    what = "destroyed exergy changed, and no evidence says why"
    return Verdict(
        "unknown",
        (what if changed else "nothing changed that needs an explanation", _steady(evidence)),
    )


def _instrument(evidence: Evidence) -> Verdict | None:
    doubts = _doubts(evidence)
    if doubts and (evidence.drifts or not evidence.judged):
        return Verdict("instrument", doubts)
    return None


def _not_judged(evidence: Evidence) -> Verdict | None:
    if evidence.judged:
        return None
    return Verdict(
        "unknown", (f"{evidence.figure} has no baseline, or too few good hours to judge it by",)
    )


def _machine(evidence: Evidence) -> Verdict | None:
    if not evidence.drifts:
        return None
    reasons = [
        f"{evidence.figure} has left its limits, with the load allowed for",
        "the readings behind it are good",
        "the live weather is not the cause: the figure does not depend on it",
    ]
    change = evidence.destroyed_reference_change
    if change is not None and _changed(change):
        reasons.append(f"destroyed exergy at the fixed reference changed by {change:+.0%} too")
    return Verdict("machine", tuple(reasons))


def _load(evidence: Evidence) -> Verdict | None:
    change, load = evidence.destroyed_reference_change, evidence.load_change
    if change is None or load is None or not (_changed(change) and _changed(load)):
        return None
    if change * load < 0:
        return None
    what = f"destroyed exergy changed by {change:+.0%} with the load ({load:+.0%})"
    return Verdict("load", (what, _steady(evidence)))


def _weather(evidence: Evidence) -> Verdict | None:
    live, reference = evidence.destroyed_live_change, evidence.destroyed_reference_change
    if live is None or reference is None or not _changed(live) or _changed(reference):
        return None
    what = (
        f"destroyed exergy changed by {live:+.0%} at the live dead state, but only by "
        f"{reference:+.0%} at the fixed reference"
    )
    return Verdict("weather", (what, _steady(evidence)))


def _doubtful(evidence: Evidence) -> Verdict | None:
    doubts = _doubts(evidence)
    return Verdict("instrument", doubts) if doubts else None


def _steady(evidence: Evidence) -> str:
    return f"{evidence.figure} is within its limits"


def _changed(change: float | None) -> bool:
    return change is not None and abs(change) >= _CHANGE


def _doubts(evidence: Evidence) -> tuple[str, ...]:
    doubts = []
    tags = f" ({', '.join(evidence.doubtful_tags)})" if evidence.doubtful_tags else ""
    if evidence.second_law_share >= _DOUBTFUL:
        doubts.append(
            f"the readings contradict the second law {evidence.second_law_share:.0%} of the "
            f"time{tags}: no machine can do that"
        )
    if evidence.doubtful_share >= _DOUBTFUL:
        doubts.append(
            f"readings behind {evidence.figure} are uncertain, bad or out of range "
            f"{evidence.doubtful_share:.0%} of the time{tags}"
        )
    moved = evidence.imbalance_change
    if moved is not None and abs(moved) >= _IMBALANCE:
        doubts.append(
            f"the mass or energy balance moved by {moved:+.1%} of the throughput: a worn machine "
            "still balances, a wrong instrument does not"
        )
    return tuple(doubts)
