"""Static pages and figures: view objects in, files out. Nothing here imports ``monitor``.

The pages work from a folder without a server and without a network; `write_assets` puts the script
and the style that they share beside them.
"""

from __future__ import annotations

from dashboards.assets import write_assets
from dashboards.costs import write_costs
from dashboards.dead_state import write_dead_state
from dashboards.equipment import write_equipment
from dashboards.files import PageError
from dashboards.overview import write_overview
from dashboards.shift import write_shift

__all__ = [
    "PageError",
    "write_assets",
    "write_costs",
    "write_dead_state",
    "write_equipment",
    "write_overview",
    "write_shift",
]
