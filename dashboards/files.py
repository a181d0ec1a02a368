"""Where pages go: names that are safe in any folder, and writes that never leave half a page."""

from __future__ import annotations

import os
import re
import tempfile
import unicodedata
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "COSTS_FILE",
    "DEAD_STATE_FILE",
    "LATEST_SHIFT_FILE",
    "OVERVIEW_FILE",
    "PageError",
    "equipment_file",
    "shift_file",
    "write_atomically",
]

OVERVIEW_FILE = "index.html"
COSTS_FILE = "costs.html"
DEAD_STATE_FILE = "dead-state.html"
LATEST_SHIFT_FILE = "shift-latest.html"

_IDENTIFIER = re.compile(r"[A-Za-z0-9_-]{1,100}")
_NOT_IN_A_NAME = re.compile(r"[^A-Za-z0-9]+")


class PageError(Exception):
    """A page cannot be written; the message says which, what was found and what to do."""


def equipment_file(identifier: str) -> str:
    """Name an equipment's page.

    Raises:
        PageError: the identifier holds anything but letters, digits, ``_`` and ``-``.
    """
    if not _IDENTIFIER.fullmatch(identifier):
        raise PageError(
            f"equipment id {identifier!r} cannot name a page; use letters, digits, '_' and '-'"
        )
    return f"equipment-{identifier}.html"


def shift_file(start: pd.Timestamp, name: str) -> str:
    """Name a shift's report by its local start date and the shift's name.

    A shift's name is free text: accents are dropped, and all but letters and digits become ``-``.

    Raises:
        PageError: nothing of the name is left.
    """
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode("ascii")
    slug = _NOT_IN_A_NAME.sub("-", plain).strip("-").lower()[:60]
    if not slug:
        raise PageError(
            f"shift name {name!r} cannot name a file; give it a name with letters or digits"
        )
    return f"shift-{start.date().isoformat()}-{slug}.html"


def write_atomically(path: Path, content: bytes) -> Path:
    """Write a file whole or not at all: a reader sees the old page or the new one.

    Raises:
        PageError: the folder or the file cannot be written.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent)
    except OSError as error:
        raise _refused(path, error) from error
    part = Path(name)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        # A temporary file is for its owner alone; a page is for whoever may read the folder.
        part.chmod(0o644)
        part.replace(path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise _refused(path, error) from error
    except BaseException:
        part.unlink(missing_ok=True)
        raise
    return path


def _refused(path: Path, error: OSError) -> PageError:
    reason = error.strerror or str(error)
    return PageError(
        f"cannot write {path.name} in {path.parent}: {reason}; "
        "check that the folder exists, has space and may be written by this user"
    )
