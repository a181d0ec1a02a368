"""One site's part of a store."""

from __future__ import annotations

from dataclasses import dataclass

from monitor.store.alarms import Alarms
from monitor.store.baselines import Baselines
from monitor.store.drift_points import DriftPoints
from monitor.store.events import Events
from monitor.store.jobs import Jobs
from monitor.store.provenance import Provenance
from monitor.store.read import Reads
from monitor.store.runs import Runs
from monitor.store.write import Writes

__all__ = ["SiteStore"]


@dataclass(frozen=True)
class SiteStore(Writes, Reads, Runs, DriftPoints, Baselines, Alarms, Events, Jobs, Provenance):
    """Everything a store does for one site; each part stands in the file of its name.

    Made by `Store.register` or `Store.site`.
    """
