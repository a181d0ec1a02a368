"""The program's version: on every page, and beside every run in the store."""

from __future__ import annotations

from functools import cache
from importlib import metadata

__all__ = ["version"]


@cache
def version() -> str:
    """The installed version, or what the source tree calls itself when it is not installed."""
    try:
        return metadata.version("lostwork")
    except metadata.PackageNotFoundError:
        return "not installed"
