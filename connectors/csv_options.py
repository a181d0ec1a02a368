"""The keys of a [[source]] table of kind ``csv``."""

from __future__ import annotations

import codecs
from typing import Annotated, Literal

from pydantic import AfterValidator, BeforeValidator, Field, model_validator

from connectors.quality import QualityOptions
from connectors.times import check_time_format, check_zone, is_numeric

__all__ = ["CsvOptions"]

_LONG_ONLY = ("tag_column", "value_column", "quality_column")


def _encoding(name: str) -> str:
    try:
        codec = codecs.lookup(name)
        newline = "\n".encode(codec.name)
    except (LookupError, UnicodeError) as error:
        raise ValueError(
            f"'{name}' is not a text encoding; write 'utf-8', 'cp1252', 'utf-16' or another"
        ) from error
    if newline != b"\n" and not codec.name.startswith("utf-16"):
        raise ValueError(f"'{name}' does not end lines as plain text does; export as 'utf-8'")
    return codec.name


def _one_character(value: object) -> object:
    named = {"tab": "\t", "\\t": "\t", "space": " "}
    if not isinstance(value, str):
        return value
    if len(named.get(value, value)) > 1:
        raise ValueError(f"{value!r}: write one character, or 'tab' or 'space'")
    return named.get(value, value)


Header = Annotated[str, Field(min_length=1)]
Mark = Annotated[str, BeforeValidator(_one_character), Field(min_length=1)]


class CsvOptions(QualityOptions):
    """CSV exports: one file or many, in long or wide layout."""

    path: str = Field(
        min_length=1,
        description="The file, or a pattern with '*' and '**' for many; relative to the site "
        "file's folder; '~' and absolute paths are allowed. Files are taken in the order of their "
        "names, numbers inside names by size; '.gz' and '.zip' files are unpacked.",
    )
    layout: Literal["long", "wide"] = Field(
        default="long", description="'long': a row a reading. 'wide': a column a tag."
    )
    time_column: Header | tuple[Header, Header] = Field(
        default="time",
        description="Header of the column of times, or a list of two: of dates, then of times of "
        "day; time_format then reads both with a blank between.",
    )
    tag_column: str = Field(default="tag", description="Header of the tag names (layout 'long').")
    value_column: str = Field(default="value", description="Header of the values (layout 'long').")
    quality_column: str = Field(
        default="", description="Header of the quality words (layout 'long'), empty for none."
    )
    time_format: Annotated[str, AfterValidator(check_time_format)] = Field(
        default="iso",
        description="'iso' (2026-01-31 06:00:00, with or without an offset); 'day_first' "
        "(31.1.2026 6:00:00.5) or 'month_first' (1/31/26 6:00 PM), whatever stands between; "
        "'epoch_s', 'epoch_ms', 'epoch_us'; 'serial_1900' or 'serial_1904', the day numbers of "
        "spreadsheets; or a strptime format such as '%d-%b-%Y %H:%M:%S'.",
    )
    time_zone: Annotated[str, AfterValidator(check_zone)] = Field(
        default="UTC",
        description="The zone of times without an offset, for example 'Europe/Vienna'. In the hour "
        "that comes twice, the order of the rows tells the passes apart; where it does not, the "
        "reading counts as the first pass and is uncertain. Times in the hour that is missing are "
        "dropped and counted.",
    )
    encoding: Annotated[str, AfterValidator(_encoding)] = Field(
        default="utf-8-sig", description="'utf-8-sig' (with or without a mark), 'utf-16', 'cp1252'."
    )
    delimiter: Mark = Field(default=",", description="Between cells; 'tab' for a tabulator.")
    decimal: Mark = Field(default=".", description="The decimal mark.")
    thousands: Annotated[str, BeforeValidator(_one_character)] = Field(
        default="", description="The mark between groups of three digits, empty for none."
    )
    comment: str = Field(
        default="", description="Lines that start with this are passed over; empty for none."
    )
    skip_lines: int = Field(
        default=0, ge=0, description="Lines before the header that are not part of the table."
    )
    rows_after_header: int = Field(
        default=0, ge=0, description="Rows after the header that hold no readings (units, texts)."
    )

    @property
    def time_columns(self) -> tuple[str, ...]:
        """The headers of the time's columns, one or two."""
        return (self.time_column,) if isinstance(self.time_column, str) else self.time_column

    @model_validator(mode="after")
    def _fits_together(self) -> CsvOptions:
        if len(self.time_columns) > 1 and is_numeric(self.time_format):
            raise ValueError(f"time_format '{self.time_format}' is one number, not two columns")
        if self.layout == "wide":
            given = [key for key in _LONG_ONLY if key in self.model_fields_set]
            if given:
                raise ValueError(
                    f"{', '.join(given)}: only for layout 'long'; in layout 'wide' the headers are "
                    "the tag names"
                )
        columns = [*self.time_columns]
        if self.layout == "long":
            columns += [self.tag_column, self.value_column]
        columns += [self.quality_column] if self.quality_column else []
        if len(set(columns)) != len(columns) or not all(columns):
            raise ValueError(f"each column needs a header of its own, found {columns}")
        return self._marks_differ()

    def _marks_differ(self) -> CsvOptions:
        if self.thousands and self.thousands == self.decimal:
            raise ValueError(f"decimal and thousands are both {self.decimal!r}")
        return self
