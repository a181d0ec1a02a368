"""What can go wrong when somebody is to be told."""

from __future__ import annotations

from monitor.errors import LostworkError

__all__ = ["NotifyError"]


class NotifyError(LostworkError):
    """A message could not be handed over; says to whom, why, and what to do.

    Attributes:
        refused: the receiver works but wants no such message: sending it again is of no use.
    """

    def __init__(self, text: str, *, refused: bool = False) -> None:
        super().__init__(text)
        self.refused = refused
