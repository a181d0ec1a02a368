"""The demo's site file and tag list: where their master copies are, and the tags they name."""

from __future__ import annotations

import csv
import shutil
from dataclasses import dataclass
from pathlib import Path

from monitor.demo.plan import DemoError
from monitor.site.units import Unit, parse_unit

__all__ = ["SITE_FILES", "DemoTag", "config_folder", "copy_site", "read_tags"]

SITE_FILES = ("site.toml", "tags.csv")


@dataclass(frozen=True)
class DemoTag:
    """One instrument of the demo, as the tag list states it.

    Attributes:
        name: the tag.
        source: ``dcs``, ``utilities`` or ``historian``.
        source_name: what the source calls it.
        unit: the unit of its readings.
        low, high: the instrument's range, in that unit.
        uncertainty: standard uncertainty in that unit.
        description: for people.
    """

    name: str
    source: str
    source_name: str
    unit: Unit
    low: float
    high: float
    uncertainty: float
    description: str

    @property
    def decimals(self) -> int:
        """Digits after the point that its readings have: about ten thousand steps a range."""
        span = self.high - self.low
        whole = len(str(int(span - 1e-9))) if span > 1 else 0
        return min(max(4 - whole, 0), 4)


def config_folder() -> Path:
    """Find the folder with the demo's site file: ``config/demo`` of the project.

    Raises:
        DemoError: it is not there, as when the package is installed without the project's folder.
    """
    folder = Path(__file__).resolve().parents[2] / "config" / "demo"
    missing = [name for name in SITE_FILES if not (folder / name).is_file()]
    if missing:
        raise DemoError(
            f"the demo's {' and '.join(missing)} should be in config/demo beside the packages, "
            "but this installation has no such folder; run the demo from a checkout of the project"
        )
    return folder


def copy_site(folder: Path) -> Path:
    """Put the demo's site file and tag list into a folder.

    Returns:
        The site file's path there.
    """
    folder.mkdir(parents=True, exist_ok=True)
    for name in SITE_FILES:
        shutil.copyfile(config_folder() / name, folder / name)
    return folder / "site.toml"


def read_tags() -> tuple[DemoTag, ...]:
    """Read the demo's tag list, in its order."""
    with (config_folder() / "tags.csv").open(encoding="utf-8", newline="") as file:
        return tuple(_tag(row) for row in csv.DictReader(file))


def _tag(row: dict[str, str]) -> DemoTag:
    low, high = float(row["range_low"]), float(row["range_high"])
    amount, _, basis = row["uncertainty"].partition(" ")
    share = basis == "% range"
    return DemoTag(
        name=row["name"],
        source=row["source"],
        source_name=row["source_name"] or row["name"],
        unit=parse_unit(row["unit"]),
        low=low,
        high=high,
        uncertainty=float(amount) * ((high - low) / 100.0 if share else 1.0),
        description=row["description"],
    )
