"""What figures rest on, said once where it holds for all; and what psi compares, by kind."""

from __future__ import annotations

from typing import TYPE_CHECKING

from dashboards.formats import percent

if TYPE_CHECKING:
    from collections.abc import Collection, Sequence

    from dashboards.views import EquipmentRow

__all__ = ["ground", "shared_ground", "statements"]

_ALWAYS = 0.995  # a part of the span that reads as all of it


def ground(row: EquipmentRow, but: Collection[str] = ()) -> str:
    """Say what a row rests on, each with its part of the time; ``but`` are said elsewhere."""
    words = [_word(word, share) for word, share in row.flags if word not in but]
    return ", ".join(words) or ("nothing else" if but and row.flags else "good readings")


def shared_ground(rows: Sequence[EquipmentRow]) -> dict[str, str]:
    """Return what all rows rest on: the word, and how a sentence says it."""
    if len(rows) < 2:  # noqa: PLR2004 - one row shares with none
        return {}
    held = [dict(row.flags) for row in rows]
    return {
        word: _word(word, max(flags[word] for flags in held))
        for word in held[0]
        if all(word in flags for flags in held)
    }


def _word(word: str, share: float) -> str:
    return word if share >= _ALWAYS else f"{word} {percent(max(share, 0.01), 0)}"


def statements(rows: Sequence[EquipmentRow]) -> dict[str, str]:
    """Return what psi compares, by kind of equipment, in the rows' order."""
    return {row.kind: row.psi_statement for row in rows}
