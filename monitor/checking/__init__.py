"""Look at a site before anything runs: sources, tags, streams, balances, and what explains them."""

from __future__ import annotations

from monitor.checking.lines import Cause, Checked, Line, Verdict
from monitor.checking.look import check

__all__ = ["Cause", "Checked", "Line", "Verdict", "check"]
