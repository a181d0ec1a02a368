"""The words that historians use for quality, sorted into the three classes of `Quality`."""

from __future__ import annotations

from collections import Counter
from typing import TYPE_CHECKING

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, model_validator

from connectors.base import Quality

if TYPE_CHECKING:
    from collections.abc import Iterable, Sequence

    import numpy.typing as npt

__all__ = ["BAD_VALUE_WORDS", "QualityOptions", "QualityWords"]

BAD_VALUE_WORDS = (
    "Bad",
    "Bad Input",
    "Bad Data",
    "No Data",
    "Comm Fail",
    "Comm Failure",
    "I/O Timeout",
    "Out of Service",
    "Not Connected",
    "Invalid",
    "Error",
    "Fail",
    "NaN",
    "NULL",
    "N/A",
    "NA",
    "---",
    "***",
)
"""What historians write in a value's place when the instrument gives none."""

# 192, 216 and 64 are the quality bytes of OPC classic. A lone 0 is left out on purpose: there it is
# bad, while in OPC UA (IEC 62541) it is good. The site file says which.
_GOOD = ("Good", "OK", "G", "Valid", "192", "216")
_UNCERTAIN = ("Uncertain", "Questionable", "Suspect", "Doubtful", "Substituted", "U", "64")
_BAD = ("Bad", "B", "Invalid", "No Data", "Comm Fail", "Out of Service", "Not Connected")


class QualityOptions(BaseModel):
    """The keys of a [[source]] table that say how quality is written."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    quality_good: tuple[str, ...] = Field(
        default=_GOOD,
        description="Words (or numbers) in the quality column that mean good; case is ignored. "
        "A lone 0 is in no list: it is bad in OPC classic and good in OPC UA, so name it yourself.",
    )
    quality_uncertain: tuple[str, ...] = Field(
        default=_UNCERTAIN,
        description="Words that mean uncertain. A word in no list is uncertain too, and counted.",
    )
    quality_bad: tuple[str, ...] = Field(default=_BAD, description="Words that mean bad.")
    bad_words: tuple[str, ...] = Field(
        default=BAD_VALUE_WORDS,
        description="Words in the value's place that mean that there is no value: the reading is "
        "kept as bad. Any other text there is bad too, and counted.",
    )

    @model_validator(mode="after")
    def _each_word_has_one_meaning(self) -> QualityOptions:
        listed = Counter(
            word
            for words in (self.quality_good, self.quality_uncertain, self.quality_bad)
            for word in {_plain(word) for word in words}
        )
        twice = sorted(word for word, times in listed.items() if times > 1)
        if twice:
            raise ValueError(f"{twice} stand in more than one of the quality lists; keep each once")
        return self


class QualityWords:
    """A lookup from a source's quality words to `Quality`.

    Args:
        options: the lists of words.
    """

    def __init__(self, options: QualityOptions) -> None:
        self._known: dict[str, Quality] = {}
        for words, quality in (
            (options.quality_bad, Quality.BAD),
            (options.quality_uncertain, Quality.UNCERTAIN),
            (options.quality_good, Quality.GOOD),
        ):
            self._known.update(dict.fromkeys(map(_plain, words), quality))
        self._bad_values = frozenset(map(_plain, options.bad_words))

    def classify(self, words: Sequence[str]) -> tuple[npt.NDArray[np.uint8], npt.NDArray[np.bool_]]:
        """Sort distinct words into classes.

        Args:
            words: the distinct words of a column.

        Returns:
            The class of each word, and where the word is in no list (class uncertain).
        """
        found = [self._known.get(_plain(word)) for word in words]
        classes = np.array([Quality.UNCERTAIN if q is None else q for q in found], dtype=np.uint8)
        return classes, np.array([q is None for q in found], dtype=np.bool_)

    def mean_no_value(self, words: Iterable[str]) -> npt.NDArray[np.bool_]:
        """Say for each distinct text in a value's place whether it is a known word for no value."""
        return np.array([_plain(word) in self._bad_values for word in words], dtype=np.bool_)


def _plain(word: str) -> str:
    return word.strip().strip('"').strip().casefold()
