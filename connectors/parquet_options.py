"""The keys of a [[source]] table of kind ``parquet``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import AfterValidator, Field, model_validator

from connectors.quality import QualityOptions
from connectors.times import check_time_format, check_zone

__all__ = ["ParquetOptions"]

_LONG_ONLY = ("tag_column", "value_column", "quality_column")


class ParquetOptions(QualityOptions):
    """Parquet files: one or many, in long or wide layout."""

    path: str = Field(
        min_length=1,
        description="The file, or a pattern with '*' and '**' for many; relative to the site "
        "file's folder. Files are taken in the order of their names, numbers inside names by size.",
    )
    layout: Literal["long", "wide"] = Field(
        default="long", description="'long': a row a reading. 'wide': a column a tag."
    )
    time_column: str = Field(default="time", min_length=1, description="Column of times.")
    tag_column: str = Field(default="tag", description="Column of tag names (layout 'long').")
    value_column: str = Field(default="value", description="Column of values (layout 'long').")
    quality_column: str = Field(
        default="", description="Column of quality (layout 'long'), empty for none."
    )
    time_format: Annotated[str, AfterValidator(check_time_format)] = Field(
        default="iso",
        description="How times are written where the column holds texts or numbers; a column of "
        "timestamps needs none.",
    )
    time_zone: Annotated[str, AfterValidator(check_zone)] = Field(
        default="UTC", description="The zone of times without an offset, as for CSV files."
    )

    @model_validator(mode="after")
    def _fits_together(self) -> ParquetOptions:
        if self.layout == "wide":
            given = [key for key in _LONG_ONLY if key in self.model_fields_set]
            if given:
                raise ValueError(
                    f"{', '.join(given)}: only for layout 'long'; in layout 'wide' the columns are "
                    "the tags"
                )
            return self
        columns = [self.time_column, self.tag_column, self.value_column]
        columns += [self.quality_column] if self.quality_column else []
        if len(set(columns)) != len(columns) or not all(columns):
            raise ValueError(f"each column has a role of its own, found {columns}")
        return self
