"""The flag that every figure carries: what it rests on, as one small integer of bits.

Flags travel from readings to streams, equipment and the ledger by bitwise or. A figure with flag 0
rests on good readings alone. A figure is absent (NaN, NULL) only together with `Flag.MISSING`.
"""

from __future__ import annotations

from enum import IntFlag

import numpy as np
import numpy.typing as npt

__all__ = ["NOT_JUDGED", "Flag", "FlagArray", "describe"]

FlagArray = npt.NDArray[np.int32]


class Flag(IntFlag):
    """What a figure rests on; each bit is one reason to look twice."""

    MISSING = 1 << 0
    """No usable reading: the figure is absent."""
    LOW_COVERAGE = 1 << 1
    """Readings cover less of the interval than the site asks for."""
    HELD = 1 << 2
    """The last good value was carried on, within its hold time."""
    UNCERTAIN = 1 << 3
    """The historian itself calls a reading uncertain."""
    BAD = 1 << 4
    """The historian calls a reading bad; it was left out."""
    OUT_OF_RANGE = 1 << 5
    """A reading outside the instrument's range was left out."""
    DEAD_STATE_HELD = 1 << 6
    """The ambient reading is held, or the reference dead state stands in for it."""
    FREEZING = 1 << 7
    """T0 is below the freezing point: dead-state water is ice Ih (IAPWS R10-06)."""
    NEAR_SATURATION = 1 << 8
    """p and T lie within the saturation band: they do not fix the state."""
    OUT_OF_REGION = 1 << 9
    """Outside the range of the steam formulation; the state is absent."""
    SOLVED = 1 << 10
    """A flow or enthalpy comes from a balance, not from an instrument."""
    UNSTEADY = 1 << 11
    """The load moved too much for a judgement."""
    OFF = 1 << 12
    """The equipment is out of service."""
    SECOND_LAW = 1 << 13
    """The readings contradict the second law: negative destruction or an efficiency above one."""
    SIDE_ASSUMED = 1 << 14
    """At saturation, the phase is the one the site file states."""
    AMBIGUOUS_TIME = 1 << 15
    """A local time that happens twice could not be resolved."""
    TOO_FAST = 1 << 16
    """A reading that moved faster than the tag's rate limit was left out."""
    SPIKE = 1 << 17
    """A spike (Hampel identifier) was left out."""
    STUCK = 1 << 18
    """The value stands still while its neighbours move; it is used, since none better is known."""
    OUT_OF_ORDER = 1 << 19
    """A reading came after ones of later times."""
    MOISTURE = 1 << 20
    """The exhaust is wetter than the turbine's stated limit: its last blades erode."""
    STARTING = 1 << 21
    """The equipment came into service within the steadiness window."""


NOT_JUDGED = (
    Flag.MISSING
    | Flag.LOW_COVERAGE
    | Flag.UNCERTAIN
    | Flag.NEAR_SATURATION
    | Flag.OUT_OF_REGION
    | Flag.UNSTEADY
    | Flag.OFF
    | Flag.STARTING
    | Flag.SECOND_LAW
    | Flag.STUCK
)
"""A condition figure with any of these is shown but never judged."""

_WORDS = {
    Flag.MISSING: "no usable reading",
    Flag.LOW_COVERAGE: "low coverage",
    Flag.HELD: "held value",
    Flag.UNCERTAIN: "uncertain reading",
    Flag.BAD: "bad reading left out",
    Flag.OUT_OF_RANGE: "reading out of range left out",
    Flag.DEAD_STATE_HELD: "ambient held or at reference",
    Flag.FREEZING: "ambient below freezing",
    Flag.NEAR_SATURATION: "near saturation",
    Flag.OUT_OF_REGION: "outside the steam tables",
    Flag.SOLVED: "from a balance",
    Flag.UNSTEADY: "unsteady",
    Flag.OFF: "out of service",
    Flag.SECOND_LAW: "contradicts the second law",
    Flag.SIDE_ASSUMED: "phase as stated",
    Flag.AMBIGUOUS_TIME: "ambiguous local time",
    Flag.TOO_FAST: "reading that moved too fast left out",
    Flag.SPIKE: "spike left out",
    Flag.STUCK: "stuck value",
    Flag.OUT_OF_ORDER: "reading out of time order",
    Flag.STARTING: "just started",
    Flag.MOISTURE: "exhaust wetter than its limit",
}


def describe(flag: int) -> str:
    """Say in words what a flag holds; an empty flag is ``good``."""
    words = [word for bit, word in _WORDS.items() if flag & bit]
    return ", ".join(words) or "good"
