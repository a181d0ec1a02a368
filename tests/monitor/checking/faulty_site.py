"""A copy of the demo site in which faults are planted: in its tag list, its site file, its exports.

A fault in the exports is written as the source would have written it: rows of a long file, cells of
a wide one with decimal commas, rows of a database.
"""

from __future__ import annotations

import io
import shutil
import sqlite3
from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path


@dataclass(frozen=True)
class FaultySite:
    """One copy; ``folder`` holds site.toml, tags.csv and exports."""

    folder: Path

    @classmethod
    def copy(cls, sound: Path, folder: Path) -> FaultySite:
        """Copy a sound site."""
        shutil.copytree(sound, folder)
        return cls(folder)

    @property
    def path(self) -> Path:
        return self.folder / "site.toml"

    def edit(self, old: str, new: str) -> None:
        """Put one text for another in the site file, once."""
        text = self.path.read_text()
        assert text.count(old) == 1, (old, text.count(old))
        self.path.write_text(text.replace(old, new))

    def tags(self) -> pd.DataFrame:
        return pd.read_csv(self.folder / "tags.csv", dtype=str, keep_default_na=False)

    def list_tag(self, tag: str, **columns: str) -> None:
        """Change cells of a tag's row in the tag list."""
        table = self.tags().set_index("name")
        for column, value in columns.items():
            table.loc[tag, column] = value
        table.reset_index().to_csv(self.folder / "tags.csv", index=False)

    def asked(self, tag: str) -> str:
        """The name that the source is asked for."""
        return str(self.tags().set_index("name").loc[tag, "source_name"]) or tag

    def cross(self, one: str, other: str) -> None:
        """Let two tags of one source read each other's column."""
        a, b = self.asked(one), self.asked(other)
        self.list_tag(one, source_name=b)
        self.list_tag(other, source_name=a)

    def source(self, tag: str) -> str:
        return str(self.tags().set_index("name").loc[tag, "source"])

    def write(self, tag: str, change: Callable[[pd.Series], pd.Series]) -> None:
        """Change what the exports hold of a tag; ``change`` gets numbers and gives numbers or text.

        Readings that it leaves out are not written.
        """
        name = self.asked(tag)
        writers = {"dcs": self._long, "utilities": self._wide, "historian": self._database}
        writers[self.source(tag)](name, change)

    def _long(self, name: str, change: Callable[[pd.Series], pd.Series]) -> None:
        for path in sorted((self.folder / "exports/dcs").glob("*.csv")):
            table = pd.read_csv(path, dtype=str, keep_default_na=False)
            own = table["tag"] == name
            times = pd.to_datetime(table.loc[own, "time"], utc=True)
            numbers = pd.to_numeric(table.loc[own, "value"], errors="coerce")
            numbers.index = pd.MultiIndex.from_arrays([numbers.index, times])
            changed = change(numbers)
            kept = changed.index.get_level_values(0)
            table = table[~own | table.index.isin(kept)].copy()
            table.loc[kept, "value"] = _texts(changed)
            table.to_csv(path, index=False)

    def _wide(self, name: str, change: Callable[[pd.Series], pd.Series]) -> None:
        for path in sorted((self.folder / "exports/utilities").glob("*.csv")):
            head, units, *rows = path.read_text().splitlines()
            table = pd.read_csv(io.StringIO("\n".join([head, *rows])), sep=";", dtype=str)
            table = table.fillna("")
            local = pd.to_datetime(table["Time"], format="%d.%m.%Y %H:%M:%S")
            times = local.dt.tz_localize("Europe/Berlin").dt.tz_convert("UTC")
            numbers = pd.to_numeric(table[name].str.replace(",", "."), errors="coerce")
            numbers.index = pd.MultiIndex.from_arrays([table.index, times])
            changed = change(numbers)
            cells = pd.Series("", index=table.index)
            cells[changed.index.get_level_values(0)] = [
                t.replace(".", ",") for t in _texts(changed)
            ]
            table[name] = cells
            table = table[table.drop(columns="Time").ne("").any(axis=1)]
            body = table.to_csv(index=False, sep=";", header=False)
            path.write_text(f"{head}\n{units}\n{body}")

    def _database(self, name: str, change: Callable[[pd.Series], pd.Series]) -> None:
        connection = sqlite3.connect(self.folder / "exports/historian.sqlite")
        with connection:
            (number,) = connection.execute(
                "select tag_id from tag_list where name = ?", (name,)
            ).fetchone()
            rows = pd.read_sql(
                "select stamp, reading from reading where tag_id = ?", connection, params=[number]
            )
            times = pd.to_datetime(rows["stamp"], unit="s", utc=True)
            numbers = rows["reading"].astype(float)
            numbers.index = pd.MultiIndex.from_arrays([rows["stamp"], times])
            changed = change(numbers)
            stamps = changed.index.get_level_values(0)
            connection.execute("delete from reading where tag_id = ?", (number,))
            values = [None if v != v else v for v in changed.to_numpy(dtype=object)]  # noqa: PLR0124
            connection.executemany(
                "insert into reading values (?, ?, ?, 192)",
                [(number, int(s), v) for s, v in zip(stamps, values, strict=True)],
            )
        connection.close()

    def values_of(self, tag: str) -> pd.Series:
        """What the exports hold of a tag, by time."""
        parts: list[pd.Series] = []

        def keep(values: pd.Series) -> pd.Series:
            parts.append(values.set_axis(times(values)))
            return values

        self.write(tag, keep)
        return pd.concat(parts)

    def shift(self, source: str, by: pd.Timedelta) -> None:
        """Move the stamps of the database."""
        assert source == "historian"
        connection = sqlite3.connect(self.folder / "exports/historian.sqlite")
        with connection:  # by way of stamps that no row has: the key is unique at every moment
            far = 10**10
            connection.execute("update reading set stamp = stamp + ?", (far,))
            connection.execute("update reading set stamp = stamp + ?", (by.total_seconds() - far,))
        connection.close()

    def cut(self, source: str, after: pd.Timestamp) -> None:
        """Let a source end before the others."""
        table = self.tags()
        for tag in table.loc[table["source"] == source, "name"]:
            self.write(tag, lambda s: s[s.index.get_level_values(1) < after])


def _texts(values: pd.Series) -> list[str]:
    return ["" if v != v else str(v) for v in values]  # noqa: PLR0124 - NaN


def times(values: pd.Series) -> pd.DatetimeIndex:
    """The times of what `FaultySite.write` hands to a change."""
    return pd.DatetimeIndex(values.index.get_level_values(1))
