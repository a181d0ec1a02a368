"""What truly happened, in files beside the exports that the product itself never reads."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd
import pyarrow as pa
from pyarrow import parquet

from monitor.demo.plan import DemoError
from monitor.demo.plant import destroyed, entropy_generation, exergy

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from monitor.demo.plan import FloatArray
    from monitor.demo.plant import Plant

__all__ = ["SiteTruth", "read_truth", "truth_tables", "write_truth"]

_STREAM_QUANTITIES = (
    "mass_flow", "pressure", "temperature", "enthalpy", "entropy", "dryness", "energy",
)  # fmt: skip
_TABLES = (
    *_STREAM_QUANTITIES, "exergy_live", "destroyed_live", "destroyed_reference",
    "entropy_generation", "heat_loss", "conditions", "ambient",
)  # fmt: skip


@dataclass(frozen=True)
class SiteTruth:
    """The truth of a demo plant, SI, one row a reading, UTC index.

    Attributes:
        tables: by name. ``mass_flow`` [kg/s], ``pressure`` [Pa], ``temperature`` [K], ``enthalpy``
            [J/kg], ``entropy`` [J/(kg K)], ``dryness``, ``energy`` [W] and ``exergy_live`` [W] have
            a column a stream; ``destroyed_live``, ``destroyed_reference`` [W],
            ``entropy_generation`` [W/K] and ``heat_loss`` [W] a column a piece of equipment;
            ``conditions`` a column ``EQUIPMENT.figure``; ``ambient`` has ``T0`` [K] and ``p0``
            [Pa].
        events: see `monitor.demo.happenings.events`.
    """

    tables: Mapping[str, pd.DataFrame]
    events: pd.DataFrame


def truth_tables(plant: Plant) -> dict[str, dict[str, FloatArray]]:
    """Make every table of the truth: name -> column -> values."""
    streams, machines = plant.streams, plant.machines
    tables = {
        name: {key: getattr(stream, name) for key, stream in streams.items()}
        for name in _STREAM_QUANTITIES
    }
    live, reference = plant.live, plant.reference
    tables["exergy_live"] = {k: exergy(s, live) for k, s in streams.items()}
    tables["destroyed_live"] = {k: destroyed(plant, m, live) for k, m in machines.items()}
    tables["destroyed_reference"] = {k: destroyed(plant, m, reference) for k, m in machines.items()}
    tables["entropy_generation"] = {
        k: entropy_generation(plant, m, live.temperature) for k, m in machines.items()
    }
    tables["heat_loss"] = {k: m.heat_loss for k, m in machines.items()}
    tables["conditions"] = {".".join(key): value for key, value in plant.conditions.items()}
    tables["ambient"] = {"T0": live.temperature, "p0": live.pressure}
    return tables


def write_truth(plant: Plant, folder: Path) -> None:
    """Write the truth into ``folder / "truth"``, a Parquet file a table and the events as CSV."""
    target = folder / "truth"
    target.mkdir(parents=True, exist_ok=True)
    times = pa.array(plant.times * 1_000_000, pa.timestamp("us", tz="UTC"))
    for name, columns in truth_tables(plant).items():
        table = pa.table({"time": times, **{k: pa.array(v) for k, v in columns.items()}})
        # Smooth numbers pack well once their bytes are sorted by place.
        parquet.write_table(
            table,
            target / f"{name}.parquet",
            compression="zstd",
            use_dictionary=False,
            column_encoding=dict.fromkeys(columns, "BYTE_STREAM_SPLIT"),
        )
    plant.events.to_csv(target / "events.csv", index=False)


def read_truth(folder: Path) -> SiteTruth:
    """Read what `write_truth` wrote into a folder.

    Raises:
        DemoError: there is no truth in the folder.
    """
    source = folder / "truth"
    missing = [name for name in _TABLES if not (source / f"{name}.parquet").is_file()]
    if missing:
        raise DemoError(f"{source} has no {missing[0]}.parquet; run write_truth(plant, folder)")
    tables = {
        name: pd.read_parquet(source / f"{name}.parquet").set_index("time") for name in _TABLES
    }
    events = pd.read_csv(source / "events.csv", keep_default_na=False)
    for column in ("start", "end"):
        events[column] = pd.to_datetime(events[column], utc=True)
    return SiteTruth(tables=tables, events=events)
