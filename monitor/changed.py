"""Whose readings have changed since an hour was computed: why its figures are replaced."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import pandas as pd

if TYPE_CHECKING:
    from monitor.site.load import Site
    from monitor.store.batch import FigureBatch
    from monitor.store.site import SiteStore

__all__ = ["Changed"]

_HOUR = 3600
_COUNTS = ["readings", "good", "bad", "out_of_order"]
"""What a tag delivered in an hour; what became of it may follow from other hours."""


@dataclass
class Changed:
    """The tags and hours that delivered something else than when they were last computed.

    Attributes:
        before: what was stored of complete hours: ``tag``, ``hour`` (integer UTC seconds), counts.
        hours: of each tag whose readings changed, the first and the last such hour.
        counted: of these, the tags that delivered more, fewer or worse readings than before; of the
            others the values changed alone, or their times.
    """

    before: pd.DataFrame
    hours: dict[str, tuple[int, int]] = field(default_factory=dict)
    counted: set[str] = field(default_factory=set)

    @classmethod
    def since(cls, store: SiteStore, start: int, reached: int) -> Changed:
        """Note what is stored of the complete hours in [start, reached), integer UTC seconds.

        The hour that figures end in goes on: more readings there are no change.
        """
        complete = max(reached // _HOUR * _HOUR, start)
        span = (pd.Timestamp(t, unit="s", tz="UTC") for t in (start, complete))
        known = store.tag_quality(*span)
        hours = pd.DatetimeIndex(known["hour"]).as_unit("s").asi8
        return cls(known[["tag", *_COUNTS, "digest"]].assign(hour=hours))

    def note(self, batch: FigureBatch) -> None:
        """Compare a window computed again with what was stored of it."""
        now = batch.tag_quality[["tag", "hour", *_COUNTS, "digest"]].astype({"tag": "str"})
        both = self.before.astype({"tag": "str"}).merge(now, on=["tag", "hour"])
        counts = [both[f"{name}_x"] != both[f"{name}_y"] for name in _COUNTS]
        counted = pd.concat(counts, axis=1).any(axis=1)
        # Hours of before version 0006 of the store have no digest.
        valued = (both["digest_x"] != both["digest_y"]) & (both["digest_x"] != 0)
        self.counted.update(both["tag"][counted])
        rows = both[counted | valued]
        spans = rows.groupby("tag")["hour"].agg(["min", "max"])
        for tag, low, high in spans.itertuples():
            first, last = self.hours.get(tag, (low, high))
            self.hours[tag] = (min(first, int(low)), max(last, int(high)))

    def told(self, site: Site) -> str:
        """Say it in a sentence, empty when nothing changed."""
        parts = []
        for source in sorted({site.tags[tag].source for tag in self.hours}):
            tags = [tag for tag in self.hours if site.tags[tag].source == source]
            first = min(self.hours[tag][0] for tag in tags)
            last = max(self.hours[tag][1] for tag in tags) + _HOUR
            count = f"{len(tags)} tag{'s' if len(tags) != 1 else ''}"
            alone = sum(tag not in self.counted for tag in tags)
            some = "" if alone == len(tags) else f" of {alone}"
            beside = f" (values{some} alone, as many readings as before)" if alone else ""
            parts.append(f"{count} of {source} from {_utc(first)} to {_utc(last)}{beside}")
        return f"readings changed since, computed again: {'; '.join(parts)}" if parts else ""


def _utc(seconds: int) -> str:
    return f"{dt.datetime.fromtimestamp(seconds, dt.UTC):%Y-%m-%d %H:%M} UTC"
