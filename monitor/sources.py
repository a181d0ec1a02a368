"""The site's sources, opened and closed together."""

from __future__ import annotations

from contextlib import ExitStack, contextmanager
from typing import TYPE_CHECKING

import connectors

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from connectors.base import Connector
    from monitor.site.load import Site

__all__ = ["open_sources"]


@contextmanager
def open_sources(site: Site) -> Iterator[Mapping[str, Connector]]:
    """Open every source of a site, by id; all are closed at the end.

    Raises:
        ConnectorError: a source cannot be opened.
    """
    with ExitStack() as stack:
        opened: dict[str, Connector] = {}
        for source in site.file.source:
            options = dict(source.model_extra or {})
            connector = connectors.open_source(source.kind, options, site.folder)
            stack.callback(connector.close)
            opened[source.id] = connector
        yield opened
