"""The files of a CSV source: plain, packed by gzip, or members of a zip archive."""

from __future__ import annotations

import gzip
import zipfile
import zlib
from dataclasses import dataclass, field
from typing import IO, TYPE_CHECKING, TypeAlias

from connectors.base import ConnectorError, Example
from connectors.paths import by_name

if TYPE_CHECKING:
    import io
    from collections.abc import Iterable
    from pathlib import Path

    from connectors.tidy import ProblemCount

__all__ = [
    "Export",
    "ExportFile",
    "open_export",
    "read_up_to",
    "unpack_names",
]

Export: TypeAlias = "io.BufferedReader | gzip.GzipFile | IO[bytes]"
"""An open file, plain or packed."""

_PIECE = 1 << 16
_DAMAGED = "packed file ends early or is damaged: what follows is not read"
_NOT_OURS = ("__MACOSX/",)  # what one desktop's packer adds beside each file


@dataclass(frozen=True)
class ExportFile:
    """One file of text, wherever it lies.

    Attributes:
        path: the file on disk.
        member: its name in the archive, empty where the file is none.
        size: [bytes] as it lies on disk.
    """

    path: Path
    member: str = ""
    size: int = field(default=0, compare=False)

    @property
    def packed(self) -> bool:
        """Whether the file can only be unpacked from its start."""
        return self.path.suffix.lower() in {".gz", ".zip"}

    @property
    def name(self) -> str:
        """The name for problems."""
        return f"{self.path.name}/{self.member}" if self.member else self.path.name

    def __str__(self) -> str:
        return f"{self.path}/{self.member}" if self.member else str(self.path)


def unpack_names(paths: Iterable[Path]) -> list[ExportFile]:
    """Return the files behind paths; an archive stands for its members, in the order of names.

    An archive that cannot be opened stands for itself, so that `open_export` tells what is wrong.
    """
    return [file for path in paths for file in _files_of(path)]


def open_export(file: ExportFile) -> Export:
    """Open a file for reading, unpacking it by its suffix.

    Raises:
        ConnectorError: the archive is damaged, empty or locked.
        OSError: the file has gone, or may not be read.
    """
    suffix = file.path.suffix.lower()
    if suffix == ".gz":
        return gzip.open(file.path, "rb")
    if suffix != ".zip":
        return file.path.open("rb")
    try:
        with zipfile.ZipFile(file.path) as archive:
            if not file.member:
                raise ConnectorError(f"{file.path} holds no file; pack the export again")
            # The member keeps the archive's file open until it is closed itself.
            return archive.open(file.member)
    except zipfile.BadZipFile as error:
        raise ConnectorError(
            f"{file.path} is not a whole zip archive ({error}); it may still be being written, "
            "else pack the export again"
        ) from error
    except (RuntimeError, NotImplementedError, KeyError) as error:
        raise ConnectorError(
            f"{file} cannot be unpacked ({error}); pack the export without a password and by the "
            "usual method, deflate"
        ) from error


def read_up_to(file: Export, size: int, name: str, problems: ProblemCount) -> bytes:
    """Read ``size`` bytes, fewer only at the end of the file or of what can be unpacked."""
    if not isinstance(file, (gzip.GzipFile, zipfile.ZipExtFile)):
        return file.read(size)
    pieces, left = [], size
    try:
        # Piece by piece: one long read would lose what stands before the damage.
        while left and (piece := file.read1(min(left, _PIECE))):
            pieces.append(piece)
            left -= len(piece)
    except (EOFError, zlib.error, gzip.BadGzipFile, zipfile.BadZipFile) as error:
        problems.add(name, _DAMAGED, 1, [Example(text=str(error))])
    return b"".join(pieces)


def _files_of(path: Path) -> list[ExportFile]:
    if path.suffix.lower() != ".zip":
        return [ExportFile(path)]
    try:
        with zipfile.ZipFile(path) as archive:
            found = [
                ExportFile(path, member.filename, member.compress_size)
                for member in archive.infolist()
                if not member.is_dir() and not member.filename.startswith(_NOT_OURS)
            ]
    except (zipfile.BadZipFile, NotImplementedError, OSError):
        found = []
    return sorted(found, key=lambda file: by_name(file.member)) or [ExportFile(path)]
