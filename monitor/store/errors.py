"""What can go wrong with a store, in words for the person who runs it."""

from __future__ import annotations

from monitor.errors import LostworkError

__all__ = ["InstanceRunning", "NoSuchAlarm", "StoreError"]


class StoreError(LostworkError):
    """The store cannot do what was asked; says where, what was found and what to do.

    No message holds a password.
    """


class InstanceRunning(StoreError):  # noqa: N818 - a state of the plant, not a fault
    """Another process holds this site's lock; the message names it."""


class NoSuchAlarm(StoreError):  # noqa: N818 - the store is well; the number is not one of its
    """The site has no alarm of this number."""
