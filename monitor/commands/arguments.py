"""Arguments and options that several commands have."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

__all__ = ["By", "Json", "Site", "Sites"]

Site = Annotated[Path, typer.Argument(metavar="SITE", help="The site file (TOML).")]
Sites = Annotated[
    list[Path],
    typer.Argument(metavar="SITE...", help="The site files (TOML); one process runs them all."),
]
Json = Annotated[bool, typer.Option("--json", help="Print JSON, for a machine.")]
By = Annotated[
    str, typer.Option("--by", help="Who says so. Left out: the name you are logged in with.")
]
