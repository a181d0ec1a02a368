"""Which misreading explains what is wrong: tried out, not looked up.

Everything that the readings say against physics (`contradictions`) is worked out again with every
plausible misreading put right (`guesses`). The one that takes most of it away is the suspect, and
the search goes on without it until nothing is explained any more. What explains as much is named
beside it: a balance of two meters cannot tell which of them is wrong.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.checking.contradictions import contradictions, resting
from monitor.checking.readings_otherwise import guesses
from monitor.checking.typical import Supposition, try_out

if TYPE_CHECKING:
    from collections.abc import Collection, Sequence

    from monitor.checking.contradictions import Contradiction
    from monitor.checking.readings_otherwise import Guess
    from monitor.checking.typical import Typical
    from monitor.equipment.base import FloatArray
    from monitor.site.load import Site

__all__ = ["Suspect", "suspects"]

_MOST = 4
"""Suspects named at most: with more faults than that, the first ones must be put right first."""
_LEAST = 0.42
"""What a suspect must explain, net of its cost: most of one clear contradiction."""
_AS_GOOD = 0.2
"""Net explanations that differ by less are as good as each other."""
_KNEE = 2.0
"""Size at which a contradiction counts half; it counts one at the most."""
_EASED = 0.25
_NAMED_OTHERS = 3


@dataclass(frozen=True)
class Suspect:
    """A misreading that explains contradictions.

    Attributes:
        guess: what it is.
        gain: how many whole contradictions it takes away, net of its cost.
        explains: what it takes away, as (kind, subject, what).
        rivals: other misreadings that explain as much.
    """

    guess: Guess
    gain: float
    explains: tuple[tuple[str, str, str], ...]
    rivals: tuple[Guess, ...]


def suspects(
    site: Site, day: Typical, doubted: Collection[str] = ()
) -> tuple[list[Suspect], list[Contradiction]]:
    """Find the misreadings that explain a day's contradictions.

    Args:
        site: the site.
        day: its typical readings.
        doubted: tags that show what another one does.

    Returns:
        The suspects, the first explaining most; and the contradictions as the readings stand, of
        size (1,).
    """
    # Suppositions go far from any plant: what overflows there is no state, and counts as such.
    with np.errstate(all="ignore"):
        return _search(site, day, guesses(site, day, doubted))


def _search(
    site: Site, day: Typical, tried: Sequence[Guess]
) -> tuple[list[Suspect], list[Contradiction]]:
    still = resting(try_out(site, day, [Supposition({})]))
    believed: dict[str, float] = {}
    restated: frozenset[str] = frozenset()
    found: list[Suspect] = []
    before: list[Contradiction] | None = None
    while True:
        taken = {tag for suspect in found for tag in suspect.guess.tags}
        open_guesses = [g for g in tried if not taken & set(g.tags)]
        cells = [Supposition(believed, restated)]
        cells += [
            Supposition(believed | g.supposition.readings, restated | g.supposition.restated)
            for g in open_guesses
        ]
        told = contradictions(site, try_out(site, day, cells), still)
        before = before or told
        best = _best(open_guesses, told)
        if best is None or len(found) == _MOST:
            return found, before
        found.append(best)
        believed = believed | best.guess.supposition.readings
        restated |= best.guess.supposition.restated


def _best(tried: Sequence[Guess], told: Sequence[Contradiction]) -> Suspect | None:
    if not tried:
        return None
    weight = np.stack([_weight(one.size) for one in told])
    cost = np.array([guess.cost for guess in tried])
    gain = weight[:, :1].sum() - weight[:, 1:].sum(axis=0) - cost
    order = np.argsort(-gain, kind="stable")
    first = int(order[0])
    if gain[first] < _LEAST:
        return None
    guess = tried[first]
    eased = weight[:, 0] - weight[:, 1 + first]
    explained = [int(k) for k in np.argsort(-eased, kind="stable") if eased[k] > _EASED]
    return Suspect(
        guess=guess,
        gain=float(gain[first]),
        explains=tuple((told[k].kind, told[k].subject, told[k].what) for k in explained),
        rivals=_rivals(tried, gain, order),
    )


def _rivals(
    tried: Sequence[Guess], gain: FloatArray, order: np.ndarray[tuple[int], np.dtype[np.intp]]
) -> tuple[Guess, ...]:
    """The best other guess on each other tag that explains as much."""
    best = tried[int(order[0])]
    seen = set(best.tags)
    rivals: list[Guess] = []
    for place in order[1:]:
        if gain[place] < gain[order[0]] - _AS_GOOD or len(rivals) == _NAMED_OTHERS:
            break
        guess = tried[int(place)]
        if not seen & set(guess.tags):
            rivals.append(guess)
            seen |= set(guess.tags)
    return tuple(rivals)


def _weight(size: FloatArray) -> FloatArray:
    """From nothing to one: many tolerances off is no more wrong than a few."""
    squared = np.minimum(size, 1e6) ** 2
    return np.where(np.isnan(size), 1.0, squared / (squared + _KNEE**2))
