"""A site's lock over the years: taken again when the store was away."""

from __future__ import annotations

from contextlib import ExitStack
from typing import TYPE_CHECKING

from monitor.store.errors import StoreError

if TYPE_CHECKING:
    from monitor.store.lock import InstanceLock
    from monitor.store.open import Store

__all__ = ["SiteLock"]


class SiteLock:
    """A site's lock that outlives its connection: PostgreSQL may be restarted under it."""

    def __init__(self, database: Store, site: str, owner: str) -> None:
        self._database, self._site, self._owner = database, site, owner
        self._stack = ExitStack()
        self._held: InstanceLock | None = None

    def check(self) -> None:
        """See that the lock is held, and take it again when its connection broke.

        Raises:
            InstanceRunning: another instance has it.
            StoreError: the store is away; ask again later.
        """
        if self._held is not None:
            try:
                self._held.check()
            except StoreError:
                self.release()
            else:
                return
        self._held = self._stack.enter_context(
            self._database.instance_lock(self._site, self._owner)
        )

    def release(self) -> None:
        """Let go of it; harmless when it is not held."""
        self._held = None
        self._stack.close()
