"""A site file that changes while the daemon runs."""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from pathlib import Path

    from monitor.site.load import Site

__all__ = ["SiteWatch"]

Stamp = tuple[int, int, int]


class SiteWatch:
    """Tells when a site file, or a tag list that it names, was written."""

    def __init__(self, site: Site) -> None:
        self._site = site
        self._seen = _stamps(site)

    def changed(self) -> bool:
        """Whether it differs from what is in force: a bad file does until it is mended."""
        return _stamps(self._site) != self._seen

    def load(self) -> Site | None:
        """Read the changed file.

        Returns:
            The site; None when it says what the one in force says.

        Raises:
            LostworkError: the file cannot be used.
            WrongUseError: it changes what only a restart can.
        """
        from monitor.site.load import load_site  # noqa: PLC0415 - the steam tables come with it

        # Before reading: what is written meanwhile counts as another change.
        stamps = _stamps(self._site)
        site = load_site(self._site.path)
        _check(self._site, site)
        same = site.hash == self._site.hash
        self._site = site
        # Tag lists that are named since count from now on.
        self._seen = _stamps(site) if same or len(_stamps(site)) != len(stamps) else stamps
        return None if same else site


def _check(old: Site, new: Site) -> None:
    fixed = (
        ("[site] id", old.id, new.id),
        ("[site] interval", old.file.site.interval, new.file.site.interval),
        ("[store] url", old.file.store.url, new.file.store.url),
        ("[daemon]", old.file.daemon, new.file.daemon),
    )
    changed = [name for name, before, after in fixed if before != after]
    if changed:
        raise WrongUseError(
            f"{new.path}: {', '.join(changed)} changed, which takes a restart; until then the "
            "site file as it was stays in force"
        )


def _stamps(site: Site) -> tuple[Stamp | None, ...]:
    return tuple(_stamp(p) for p in (site.path, *(site.folder / n for n in site.file.tag_lists)))


def _stamp(path: Path) -> Stamp | None:
    try:
        found = path.stat()
    except OSError:
        return None
    # The number too: editors put a new file in place of the old one.
    return found.st_mtime_ns, found.st_size, found.st_ino
