"""Names on the command line: which one of the site is meant, who acts, how many there are."""

from __future__ import annotations

import difflib
import getpass
from typing import TYPE_CHECKING

from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from collections.abc import Iterable

__all__ = ["count", "known", "who"]


def known(name: str, names: Iterable[str], what: str) -> str:
    """Return a name that is among others.

    Raises:
        WrongUseError: it is not; the message names what comes close.
    """
    listed = list(names)
    if name in listed:
        return name
    near = difflib.get_close_matches(name, listed, n=1, cutoff=0.5)
    hint = f"did you mean '{near[0]}'?" if near else f"it has {', '.join(listed) or 'none'}"
    raise WrongUseError(f"this site has no {what} '{name}'; {hint}")


def count(number: int, thing: str) -> str:
    """A number of things: ``1 window``, ``2 windows``."""
    return f"{number} {thing}" if number == 1 else f"{number} {thing}s"


def who(by: str) -> str:
    """Who acts: as stated, else who is logged in."""
    if by:
        return by
    try:
        return getpass.getuser()
    except (OSError, KeyError):
        raise WrongUseError("say who you are: --by NAME") from None
