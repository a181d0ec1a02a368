"""Tags that are one and the same instrument under two names."""

from __future__ import annotations

import difflib
import itertools
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    import pandas as pd

    from monitor.site.load import Site

__all__ = ["Twin", "twins"]

_LEAST_DISTINCT = 10
_LEAST_COMMON = 50
_SAME_SHARE, _NEAR = 0.97, 0.01


@dataclass(frozen=True)
class Twin:
    """Two tags with the same readings.

    Attributes:
        copy: the one that is likelier to read where it should not.
        of: the other.
        by_name: both ask the source for the same name; else their series agree to the last digit.
    """

    copy: str
    of: str
    by_name: bool


def twins(site: Site, parts: Mapping[str, pd.DataFrame]) -> list[Twin]:
    """Find tags that read the same column, or series that agree to the last digit.

    Args:
        site: the site.
        parts: a day's readings by tag.
    """
    found: list[Twin] = []
    for one, other in _candidates(site, parts):
        a, b = site.tags[one], site.tags[other]
        by_name = a.source == b.source and a.historian_name == b.historian_name
        if by_name or _equal(parts[one], parts[other]):
            copy, of = _ordered(site, one, other)
            found.append(Twin(copy, of, by_name))
    return found


def _candidates(site: Site, parts: Mapping[str, pd.DataFrame]) -> Iterator[tuple[str, str]]:
    """Yield pairs that ask for one name, or show about the same on the day."""
    tags = site.used_tags()
    middle = {n: float(part["value"].median()) for n, part in parts.items() if n in tags}
    for one, other in itertools.combinations(tags, 2):
        a, b = tags[one], tags[other]
        if (a.source, a.historian_name) == (b.source, b.historian_name):
            yield one, other
        elif one in middle and other in middle:
            near = _NEAR * max(abs(middle[one]), abs(middle[other]))
            if near > 0.0 and abs(middle[one] - middle[other]) <= near:
                yield one, other


def _equal(one: pd.DataFrame, other: pd.DataFrame) -> bool:
    """Whether two series agree to the last digit wherever both have a reading, and move."""
    both = one[["time", "value"]].merge(other[["time", "value"]], on="time").dropna()
    if len(both) < _LEAST_COMMON or both["value_x"].nunique() < _LEAST_DISTINCT:
        return False
    return bool(np.mean(both["value_x"] == both["value_y"]) >= _SAME_SHARE)


def _ordered(site: Site, one: str, other: str) -> tuple[str, str]:
    """The tag whose name and description are further from what it asks for comes first."""

    def likeness(name: str) -> float:
        tag = site.tags[name]
        asked, said = tag.historian_name.casefold(), tag.description.casefold()
        named = difflib.SequenceMatcher(None, name.casefold(), asked).ratio()
        return 1.0 if asked in said else named

    return (one, other) if likeness(one) < likeness(other) else (other, one)
