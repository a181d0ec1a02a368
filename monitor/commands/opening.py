"""From a path on the command line to an open site and its store."""

from __future__ import annotations

from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING

from monitor.errors import LostworkError, SiteFileError, SiteUnreadableError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from monitor.site.load import Site
    from monitor.store.open import Store
    from monitor.store.site import SiteStore

__all__ = ["Opened", "open_site", "opened", "opened_to_read", "register"]


@dataclass(frozen=True)
class Opened:
    """A site with its store open.

    Attributes:
        site: as the site file has it.
        database: the store, which may hold other sites too.
        store: the site's part of it.
    """

    site: Site
    database: Store
    store: SiteStore


def open_site(path: Path) -> Site:
    """Read a site file.

    Raises:
        SiteFileError: with every error in it.
        SiteUnreadableError: the file cannot be read at all.
    """
    from monitor.site.load import load_site  # noqa: PLC0415 - the steam tables come with it

    try:
        return load_site(path)
    except SiteFileError:
        raise
    except LostworkError as error:
        raise SiteUnreadableError(str(error)) from error


@contextmanager
def opened(path: Path) -> Iterator[Opened]:
    """Open a site and its store to write; the store is made when it is not there.

    Raises:
        SiteFileError, SiteUnreadableError: see `open_site`.
        StoreError: the store cannot be used.
    """
    from monitor.store.open import open_store  # noqa: PLC0415

    site = open_site(path)
    with open_store(site.file.store.url, site.folder) as database:
        yield Opened(site, database, register(site, database))


@contextmanager
def opened_to_read(path: Path) -> Iterator[Opened]:
    """Open a site and its store to read; a site that was never computed is an error.

    Raises:
        SiteFileError, SiteUnreadableError: see `open_site`.
        StoreError: the store cannot be used, or holds nothing of this site yet.
    """
    from monitor.store.engine import make_engine, place, sqlite_path  # noqa: PLC0415
    from monitor.store.errors import StoreError  # noqa: PLC0415
    from monitor.store.open import open_store  # noqa: PLC0415

    site = open_site(path)
    url, folder = site.file.store.url, site.folder
    engine = make_engine(url, folder)
    # Looking must not leave an empty database behind.
    if engine.dialect.name == "sqlite" and not sqlite_path(engine).exists():
        raise StoreError(
            f"{place(engine)}: is not there yet; fill it with "
            f"'lostwork once {path}' or 'lostwork backfill {path} --from ... --to ...'"
        )
    engine.dispose()
    with open_store(url, folder) as database:
        if site.id not in database.sites():
            raise StoreError(
                f"{place(database.engine)}: holds nothing of site '{site.id}' yet; fill it with "
                f"'lostwork once {path}' or 'lostwork backfill {path} --from ... --to ...'"
            )
        yield Opened(site, database, database.site(site.id, None))


def register(site: Site, database: Store) -> SiteStore:
    """Make a site known to a store, with its streams, its equipment and their condition figures.

    Raises:
        StoreError: the store holds this site with another interval, or cannot be written.
    """
    items = site.items.values()
    return database.register(
        site.id,
        site.file.site.name,
        int(site.file.site.interval),
        site.file.site.time_zone,
        site.calendar,
        streams=[(s.id, s.name or s.id, s.medium) for s in site.streams.values()],
        equipment=[(i.id, i.name, i.kind.name) for i in items],
        figures=[
            (i.id, f.name, f.label, f.unit, f.worse) for i in items for f in i.kind.figures(i)
        ],
    )
