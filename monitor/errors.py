"""Errors that a person can act on: each says what was found, where, and what to do."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["Issue", "LostworkError", "SiteFileError", "SiteUnreadableError", "WrongUseError"]


class LostworkError(Exception):
    """Base of all errors that end a command with a sentence instead of a traceback."""


@dataclass(frozen=True)
class Issue:
    """One thing wrong in a site file.

    Attributes:
        table: for example ``[[stream]] 'hp_steam'``.
        key: the key in that table, empty when the table as a whole is meant.
        text: what was found and what would be right.
    """

    table: str
    key: str
    text: str

    def __str__(self) -> str:
        where = f"{self.table}, {self.key}" if self.key else self.table
        return f"{where}: {self.text}"


class SiteFileError(LostworkError):
    """A site file that cannot be used, with every issue found in it."""

    def __init__(self, path: str, issues: list[Issue]) -> None:
        self.path = path
        self.issues = issues
        count = f"{len(issues)} error{'s' if len(issues) > 1 else ''}"
        super().__init__("\n".join([f"{path}: {count}", *(f"  {issue}" for issue in issues)]))


class SiteUnreadableError(LostworkError):
    """A site file that is not there, may not be read, or is no TOML."""


class WrongUseError(LostworkError):
    """A command was asked for something that it cannot mean; says what it can."""
