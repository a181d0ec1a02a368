"""What all pages share and stands beside them: the plotly script, our own, the style, the icon."""

from __future__ import annotations

from pathlib import Path

from dashboards.files import PageError, write_atomically
from dashboards.render import environment

__all__ = ["ASSETS", "write_assets"]

ASSETS = ("plotly.min.js", "pages.js", "style.css", "favicon.svg")
"""The files' names; pages ask for nothing else."""


def write_assets(folder: Path) -> tuple[Path, ...]:
    """Put the shared files beside the pages; a file that is already the same is left alone.

    Args:
        folder: where the pages are.

    Returns:
        The files that were written.

    Raises:
        PageError: the folder cannot be written.
    """
    # Imported late: plotly takes a second that writing a page should not pay.
    from plotly.offline import get_plotlyjs  # noqa: PLC0415

    folder = Path(folder)
    templates = environment()
    written: list[Path] = []
    for name in ASSETS:
        if name == "plotly.min.js":
            content = str(get_plotlyjs()).encode("utf-8")
        else:
            content = templates.get_template(f"{name}.j2").render().encode("utf-8")
        path = folder / name
        if not _is_same(path, content):
            written.append(write_atomically(path, content))
    return tuple(written)


def _is_same(path: Path, content: bytes) -> bool:
    try:
        return path.is_file() and path.read_bytes() == content
    except OSError as error:
        raise PageError(
            f"cannot read {path.name} in {path.parent}: {error.strerror}; "
            "check that this user may read the folder of the pages"
        ) from error
