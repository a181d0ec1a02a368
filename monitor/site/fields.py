"""Building blocks of the site file's tables: quantities with units, and short names."""

from __future__ import annotations

import re
from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict

from monitor.site.units import Quantity, UnitError, quantity

__all__ = ["Duration", "FileSize", "Identifier", "Pressure", "Table", "Temperature", "si"]


class Table(BaseModel):
    """Base of the site file's tables: unknown keys are errors, and nothing changes later."""

    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True)


def si(expected: Quantity) -> Any:  # noqa: ANN401 - a validator for an Annotated alias
    """Validate a number with a unit ('12.5 bar(a)') into SI."""

    def read(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, (str, int, float)):
            raise UnitError(f"{value!r} is not a number with a unit")
        if isinstance(value, str):
            return quantity(value, expected)
        if expected is Quantity.FRACTION:
            return float(value)
        raise UnitError(
            f"{value!r} has no unit; write it as text, for example '{value} {expected}'"
        )

    return BeforeValidator(read)


Duration = Annotated[float, si(Quantity.TIME)]
"""A duration, read from text such as '5 min' into seconds."""
Pressure = Annotated[float, si(Quantity.PRESSURE)]
Temperature = Annotated[float, si(Quantity.TEMPERATURE)]


_SIZE = re.compile(r"(\d+(?:\.\d+)?) ?(kB|MB|GB)")
_BYTES = {"kB": 1_000, "MB": 1_000_000, "GB": 1_000_000_000}


def _file_size(value: object) -> object:
    if not isinstance(value, str):
        # Of this kind, so that pydantic makes it a sentence about the site file.
        raise ValueError(f"{value!r} has no unit; write it as text, for example '10 MB'")  # noqa: TRY004
    found = _SIZE.fullmatch(value.strip())
    if found is None or not float(found[1]):
        raise ValueError(f"'{value}' is not a size; write it like '500 kB', '10 MB' or '1 GB'")
    return int(float(found[1]) * _BYTES[found[2]])


FileSize = Annotated[int, BeforeValidator(_file_size)]
"""A file's size, read from text such as '10 MB' into bytes."""


def _identifier(value: str) -> str:
    if not value or not all(c.isalnum() or c in "_-" for c in value) or len(value) > 64:  # noqa: PLR2004
        raise ValueError("use letters, digits, '_' and '-' (64 at most): it names files and rows")
    return value


Identifier = Annotated[str, AfterValidator(_identifier)]
