"""What pydantic finds wrong, told by the site file's table and key, with the nearest right word."""

from __future__ import annotations

import difflib
from typing import TYPE_CHECKING, Any

import pydantic

from monitor.errors import Issue

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

__all__ = ["issue_of", "no_such", "option_issue", "unique"]


def unique(issues: list[Issue]) -> list[Issue]:
    """The same issues in the same order, each once."""
    return list(dict.fromkeys(issues))


def issue_of(error: Any, raw: Mapping[str, Any], model: type[pydantic.BaseModel]) -> Issue:  # noqa: ANN401
    """Turn one pydantic error into a table, a key and a sentence."""
    location = [str(p) if not isinstance(p, int) else p for p in error["loc"]]
    table, rest = _table_of(location, raw)
    # pydantic adds the name of the union's member; the site file has no such key.
    key = ".".join(str(p) for p in rest if not _is_branch(str(p)))
    text = error["msg"].removeprefix("Value error, ")
    if error["type"] == "extra_forbidden":
        known = _keys_at(model, location)
        near = difflib.get_close_matches(str(location[-1]), known, n=1)
        hint = f"; did you mean '{near[0]}'?" if near else f"; known keys: {', '.join(known)}"
        text = f"is not a key of this table{hint}"
    elif error["type"] == "missing":
        text = "is missing"
    elif "input" in error and not isinstance(error["input"], (dict, list)):
        text = f"found {error['input']!r}: {text}"
    return Issue(table, key, text)


def _is_branch(part: str) -> bool:
    return part in {"Reference", "str", "list[str]"} or part.startswith(("literal[", "function-"))


def _table_of(location: list[Any], raw: Mapping[str, Any]) -> tuple[str, list[Any]]:
    head = str(location[0]) if location else ""
    if len(location) > 1 and isinstance(location[1], int):
        rows = raw.get(head, [])
        row = rows[location[1]] if location[1] < len(rows) else {}
        known = row.get("id") or row.get("name") if isinstance(row, dict) else None
        return f"[[{head}]] {known!r}" if known else f"[[{head}]] no. {location[1] + 1}", location[
            2:
        ]
    return f"[{head}]", location[1:]


def _keys_at(model: type[pydantic.BaseModel], location: list[Any]) -> list[str]:
    """Field names of the (nested) model that holds the key a location ends on."""
    here: Any = model
    for part in location[:-1]:
        if isinstance(part, int):
            continue
        field = getattr(here, "model_fields", {}).get(part)
        if field is None:
            break
        inner = [a for a in (field.annotation, *getattr(field.annotation, "__args__", ())) if a]
        models = [a for a in inner if isinstance(a, type) and issubclass(a, pydantic.BaseModel)]
        if not models:
            break
        here = models[0]
    return [field.alias or name for name, field in getattr(here, "model_fields", {}).items()]


def option_issue(table: str, error: Any, model: type[pydantic.BaseModel]) -> Issue:  # noqa: ANN401
    """Turn an error in a source's or a kind's own keys into a table, a key and a sentence."""
    issue = issue_of(error | {"loc": ("", *error["loc"])}, {}, model)
    if error["type"] == "extra_forbidden":
        known = list(model.model_fields)
        near = difflib.get_close_matches(str(error["loc"][-1]), known, n=1)
        hint = f"; did you mean '{near[0]}'?" if near else f"; known keys: {', '.join(known)}"
        return Issue(table, str(error["loc"][-1]), f"is not a key of this table{hint}")
    return Issue(table, issue.key, issue.text)


def no_such(what: str, name: str, known: Iterable[str]) -> str:
    """Say that a name is not known, and which known one comes nearest."""
    near = difflib.get_close_matches(name, list(known), n=1)
    hint = f"; did you mean '{near[0]}'?" if near else ""
    return f"'{name}' is not a {what} of this file{hint}"
