"""The files that a source's path names, in the order in which later ones count."""

from __future__ import annotations

import glob
import re
from pathlib import Path

from connectors.base import ConnectorError

__all__ = ["by_name", "matching_files", "unreadable"]


def matching_files(path: str, folder: Path) -> list[Path]:
    """Return the files that a path or pattern names, by name, numbers inside names by size.

    Args:
        path: a file, or a pattern with ``*`` and ``**``; relative to ``folder``.
        folder: the site file's folder.

    Raises:
        ConnectorError: there is none.
    """
    try:
        pattern = Path(path).expanduser()
    except RuntimeError as error:
        raise ConnectorError(f"path '{path}': {error}") from error
    # Only the pattern is one: a folder may have '[' in its name, and so may a single file.
    if (folder / pattern).is_file():
        return [folder / pattern]
    found = glob.glob(str(pattern), root_dir=folder, recursive=True)  # noqa: PTH207
    paths = sorted((folder / name for name in found), key=by_name)
    paths = [file for file in paths if file.is_file()]
    if not paths:
        raise ConnectorError(
            f"no file matches {folder / pattern}; correct the source's path, or start "
            "the export that writes there"
        )
    return paths


def by_name(name: object) -> tuple[tuple[int, int, str], ...]:
    """Sort 'part 10' after 'part 9'."""
    pieces = re.split(r"(\d+)", str(name))
    return tuple((1, int(p), p) if p.isdecimal() else (0, 0, p) for p in pieces)


def unreadable(file: object, error: OSError) -> ConnectorError:
    """Say that a file cannot be read, and what to do."""
    return ConnectorError(
        f"{file} cannot be read ({error.strerror or error}); see that it is there and that the "
        "account that runs this may read it"
    )
