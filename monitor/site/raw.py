"""A site file as it stands on the disk: TOML, environment variables, tag lists."""

from __future__ import annotations

import csv
import hashlib
import os
import re
import tomllib
from typing import TYPE_CHECKING, Any, cast

from monitor.errors import Issue, LostworkError
from monitor.site.models import Meter, Tag

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

__all__ = ["TAG_LISTS", "read_toml", "with_environment", "with_tag_lists"]

TAG_LISTS = "tag_lists"
"""The table of an issue with a whole list: what tags it holds is then not known."""
_VARIABLE = re.compile(r"\$\{([A-Za-z_][A-Za-z0-9_]*)\}")


def read_toml(path: Path) -> tuple[dict[str, Any], hashlib._Hash]:
    """Read a site file; the hash takes the tag lists too before it is done.

    Raises:
        LostworkError: it cannot be read, or is no TOML.
    """
    try:
        content = path.read_bytes()
    except OSError as error:
        raise LostworkError(
            f"{path}: cannot be read ({error.strerror}); name a site file, for example "
            "config/demo/site.toml"
        ) from error
    digest = hashlib.sha256(content)
    try:
        return tomllib.loads(content.decode("utf-8-sig")), digest
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise LostworkError(f"{path}: not a TOML file: {error}") from error


def with_environment(raw: dict[str, Any], issues: list[Issue]) -> dict[str, Any]:
    """Put environment variables in place of ``${NAME}``, in every text of the file."""

    def fill(value: Any, where: str) -> Any:  # noqa: ANN401
        if isinstance(value, dict):
            return {k: fill(v, f"{where}.{k}" if where else k) for k, v in value.items()}
        if isinstance(value, list):
            return [fill(v, where) for v in value]
        if not isinstance(value, str):
            return value
        issues.extend(
            Issue(where, "", f"environment variable {name} is not set; set it and try again")
            for name in _VARIABLE.findall(value)
            if name not in os.environ
        )
        return _VARIABLE.sub(lambda m: os.environ.get(m[1], ""), value)

    return cast("dict[str, Any]", fill(raw, ""))


_RANGE_COLUMNS = ("range_low", "range_high")
_METER_COLUMNS = tuple(f"meter_{key}" for key in Meter.model_fields)
_LIST_COLUMNS = (
    *(key for key in Tag.model_fields if key not in {"range", "meter"}),
    *_RANGE_COLUMNS,
    *_METER_COLUMNS,
)


def with_tag_lists(
    raw: dict[str, Any], path: Path, issues: list[Issue], digest: hashlib._Hash
) -> dict[str, Any]:
    """Add the rows of the CSV tag lists to the [[tag]] tables."""
    tags = list(raw.get("tag", []))
    lists = raw.get("tag_lists", [])
    for name in lists if isinstance(lists, list) else []:
        file = path.parent / str(name)
        try:
            content = file.read_bytes()
            text = content.decode("utf-8-sig")
        except (OSError, UnicodeDecodeError) as error:
            said = error.strerror if isinstance(error, OSError) else f"{error}; save it as UTF-8"
            issues.append(Issue(TAG_LISTS, str(name), f"cannot be read ({said})"))
            continue
        digest.update(content)
        tags += _rows_of(text, str(name), issues)
    return raw | {"tag": tags} if tags else raw


def _rows_of(text: str, name: str, issues: list[Issue]) -> Iterator[dict[str, Any]]:
    delimiter = (
        ";" if text.partition("\n")[0].count(";") > text.partition("\n")[0].count(",") else ","
    )
    reader = csv.DictReader(text.splitlines(), delimiter=delimiter)
    unknown = sorted(set(reader.fieldnames or ()) - set(_LIST_COLUMNS))
    if unknown or "name" not in (reader.fieldnames or ()):
        wrong = (
            f"{', '.join(map(repr, unknown))} in the header row" if unknown else "no 'name' there"
        )
        said = f"{wrong}; the header row must be made of {', '.join(_LIST_COLUMNS)}"
        issues.append(Issue(TAG_LISTS, name, said))
        return
    for row in reader:
        tag: dict[str, Any] = {
            k: v.strip()
            for k, v in row.items()
            if k in _LIST_COLUMNS and v and v.strip() and k not in _RANGE_COLUMNS
        }
        meter = {k.removeprefix("meter_"): tag.pop(k) for k in _METER_COLUMNS if k in tag}
        if meter:
            tag["meter"] = meter
        low, high = (row.get("range_low") or "").strip(), (row.get("range_high") or "").strip()
        if low or high:
            try:
                tag["range"] = (float(low), float(high))
            except ValueError:
                issues.append(
                    Issue(
                        f"tag list {name}, line {reader.line_num}",
                        "range_low, range_high",
                        f"'{low}' and '{high}' are not two numbers (decimal point, both or none)",
                    )
                )
        yield tag
