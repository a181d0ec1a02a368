"""The fictional demo site: a plant simulator that writes historian exports and the truth."""

from __future__ import annotations

from monitor.demo.feed import LiveFeed, live_feed, write_exports
from monitor.demo.files import copy_site
from monitor.demo.plan import DemoError, DemoPlan
from monitor.demo.plant import Plant
from monitor.demo.simulate import simulate
from monitor.demo.truth import SiteTruth, read_truth, write_truth

__all__ = [
    "DemoError",
    "DemoPlan",
    "LiveFeed",
    "Plant",
    "SiteTruth",
    "copy_site",
    "live_feed",
    "read_truth",
    "simulate",
    "write_exports",
    "write_truth",
]
