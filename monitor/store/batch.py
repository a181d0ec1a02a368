"""What one computed window hands to the store: plain tables, units in every column name.

Times are integer seconds since 1970-01-01 UTC, the start of the grid cell they stand for. A figure
is NaN exactly where its flag holds `Flag.MISSING` or `Flag.OUT_OF_REGION`. Standard uncertainties
(``u_`` columns, in the unit of their figure) are those of the instruments' classes, the same in all
cells of an hour; they are NaN where a class is not known, and in figures of before version 0005 of
the schema.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "CONDITION_COLUMNS",
    "EQUIPMENT_COLUMNS",
    "LEDGER_COLUMNS",
    "LEFT_OUT_COLUMNS",
    "QUALITY_COLUMNS",
    "STREAM_COLUMNS",
    "FigureBatch",
]

STREAM_COLUMNS = (
    "mass_flow_kg_s",
    "pressure_bar",  # absolute
    "temperature_degc",
    "enthalpy_kj_kg",
    "entropy_kj_kgk",
    "dryness",
    "energy_kw",
    "exergy_live_kw",
    "exergy_reference_kw",
    "u_mass_flow_kg_s",
    "u_exergy_live_kw",
)
EQUIPMENT_COLUMNS = (
    "load_kg_s",
    "exergy_in_live_kw",
    "exergy_out_live_kw",
    "destroyed_live_kw",
    "fuel_live_kw",
    "product_live_kw",
    "exergy_in_reference_kw",
    "exergy_out_reference_kw",
    "destroyed_reference_kw",
    "fuel_reference_kw",
    "product_reference_kw",
    "heat_loss_kw",
    "heat_loss_exergy_live_kw",
    "stored_rate_live_kw",
    "unaccounted_live_kw",
    "closure_live_kw",
    "mass_imbalance_kg_s",
    "energy_imbalance_kw",
    "u_destroyed_live_kw",
)
LEDGER_COLUMNS = (
    "t0_degc",
    "p0_bar",
    "supplied_live_kw",
    "used_live_kw",
    "lost_live_kw",
    "destroyed_live_kw",
    "stored_rate_live_kw",
    "imbalance_live_kw",
    "supplied_reference_kw",
    "used_reference_kw",
    "lost_reference_kw",
    "destroyed_reference_kw",
    "stored_rate_reference_kw",
    "imbalance_reference_kw",
    "u_supplied_live_kw",
    "u_used_live_kw",
    "u_lost_live_kw",
    "u_destroyed_live_kw",
    "u_imbalance_live_kw",
)
CONDITION_COLUMNS = ("value", "weight", "u_value")
QUALITY_COLUMNS = (
    "readings",
    "good",
    "uncertain",
    "bad",
    "out_of_range",
    "too_fast",
    "spike",
    "out_of_order",  # counted beside the kinds above, as is the next
    "ambiguous",
    "cells",
    "cells_missing",
    "cells_held",
    "cells_stuck",
)
LEFT_OUT_COLUMNS = ("bad", "out_of_range", "too_fast", "spike")
"""Counts of readings that were left out, each for one reason."""


@dataclass(frozen=True)
class FigureBatch:
    """All figures of one window of whole grid cells.

    Attributes:
        start, end: the window in integer UTC seconds, half open, both on the grid; ``start`` is on
            a full hour. Rows of these subjects in [start, end) are replaced by the batch's.
        streams: ``subject``, ``time``, `STREAM_COLUMNS`, ``flag``.
        equipment: ``subject``, ``time``, `EQUIPMENT_COLUMNS`, ``flag``.
        conditions: ``subject``, ``figure``, ``time``, `CONDITION_COLUMNS`, ``flag``; ``value`` in
            the figure's own unit, ``weight`` its denominator for weighted means (1 where it has
            none).
        ledger: ``time``, `LEDGER_COLUMNS`, ``flag``.
        tag_quality: ``tag``, ``hour`` (integer UTC seconds), `QUALITY_COLUMNS`, which are counts,
            and perhaps ``digest``: it hangs on all readings of the hour, 0 for not known.
    """

    start: int
    end: int
    streams: pd.DataFrame
    equipment: pd.DataFrame
    conditions: pd.DataFrame
    ledger: pd.DataFrame
    tag_quality: pd.DataFrame
