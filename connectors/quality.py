"""How historians write quality, sorted into the three classes of `Quality`."""

from __future__ import annotations

import re
from collections import Counter
from typing import TYPE_CHECKING, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, field_validator, model_validator

from connectors.base import Quality

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Mapping, Sequence

    import numpy.typing as npt

__all__ = ["BAD_VALUE_WORDS", "QualityOptions", "QualityWords", "opc_classic", "opc_ua"]

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

_RANGE = re.compile(r"(-?\d+) ?- ?(-?\d+)")
_CODE = re.compile(r"([+-]?\d{1,20})(\.0*)?|0x[0-9a-f]{1,16}", re.IGNORECASE)
_STATUS_CODE_BITS = 32


class QualityOptions(BaseModel):
    """The keys of a [[source]] table that say how quality and states are written."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    quality_kind: Literal["words", "opc_ua", "opc_classic"] = Field(
        default="words",
        description="'words': the lists below. 'opc_ua': status codes of IEC 62541-4, as numbers "
        "or names; the top two bits are 00 good, 01 uncertain, 10 and 11 bad. 'opc_classic': "
        "quality bytes, whose bits 6 and 7 are 11 good, 01 uncertain, 00 bad. Words that are no "
        "code are looked up in the lists in either case.",
    )
    quality_good: tuple[str, ...] = Field(
        default=_GOOD,
        description="Words, numbers or ranges of whole numbers ('192-255') in the quality column "
        "that mean good; case is ignored. A lone 0 is in no list: it is bad in OPC classic and "
        "good in OPC UA, so name it yourself or set quality_kind.",
    )
    quality_uncertain: tuple[str, ...] = Field(
        default=_UNCERTAIN,
        description="Those that mean uncertain. What is in no list is uncertain too, and counted.",
    )
    quality_bad: tuple[str, ...] = Field(default=_BAD, description="Those that mean bad.")
    bad_words: tuple[str, ...] = Field(
        default=BAD_VALUE_WORDS,
        description="Words in the value's place that mean that there is no value: the reading is "
        "kept as bad. Any other text there is bad too, and counted; so is an infinity.",
    )
    states: dict[str, float] = Field(
        default_factory=dict,
        description="Words in the value's place that are digital states, with their numbers: "
        "{ Open = 1, Closed = 0 }; case is ignored. A state goes before a bad word.",
    )

    @field_validator("quality_good", "quality_uncertain", "quality_bad", mode="before")
    @classmethod
    def _numbers_may_stand_bare(cls, value: object) -> object:
        if not isinstance(value, (list, tuple)):
            return value
        return [str(v) if isinstance(v, int) and not isinstance(v, bool) else v for v in value]

    @field_validator("states")
    @classmethod
    def _states_are_words(cls, value: dict[str, float]) -> dict[str, float]:
        plain = Counter(map(_plain, value))
        wrong = sorted(word for word, n in plain.items() if n > 1 or not word or _is_number(word))
        if wrong:
            raise ValueError(f"{wrong}: a state is a word, named once (case is ignored)")
        if not np.isfinite(list(value.values())).all():
            raise ValueError("a state's number is finite")
        return value

    @model_validator(mode="after")
    def _each_word_has_one_meaning(self) -> QualityOptions:
        lists = (self.quality_good, self.quality_uncertain, self.quality_bad)
        listed = Counter(word for words in lists for word in {_plain(word) for word in words})
        twice = sorted(word for word, times in listed.items() if times > 1)
        if twice:
            raise ValueError(f"{twice} stand in more than one of the quality lists; keep each once")
        spans = [(at, *span) for at, words in enumerate(lists) for span in _spans(words)]
        for at, low, high in spans:
            for other_at, other_low, other_high in spans:
                if at != other_at and low <= other_high and other_low <= high:
                    raise ValueError(
                        f"the codes {low} to {high} and {other_low} to {other_high} stand in two "
                        "of the quality lists (64, 192 and 216 do by default: write out all three "
                        "lists)"
                    )
        return self


class QualityWords:
    """A lookup from a source's quality words to `Quality`.

    Args:
        options: the lists of words.
    """

    def __init__(self, options: QualityOptions) -> None:
        self._known: dict[str, Quality] = {}
        self._spans: list[tuple[int, int, Quality]] = []
        for words, quality in (
            (options.quality_bad, Quality.BAD),
            (options.quality_uncertain, Quality.UNCERTAIN),
            (options.quality_good, Quality.GOOD),
        ):
            self._known.update(dict.fromkeys(map(_plain, words), quality))
            self._spans += [(low, high, quality) for low, high in _spans(words)]
        self._decode = _DECODERS.get(options.quality_kind)
        states = {_plain(word): number for word, number in options.states.items()}
        self.states: Mapping[str, float] = states
        """The numbers of digital states by their plain words."""
        self.bad_values = tuple(w for w in options.bad_words if _plain(w) not in states)
        """The words for no value, as the site file writes them."""
        self._bad_values = frozenset(map(_plain, self.bad_values))

    def classify(self, words: Sequence[str]) -> tuple[npt.NDArray[np.uint8], npt.NDArray[np.bool_]]:
        """Sort distinct words into classes.

        Args:
            words: the distinct words of a column.

        Returns:
            The class of each word, and where the word is in no list (class uncertain).
        """
        found = [self._class(_plain(word)) for word in words]
        classes = np.array([Quality.UNCERTAIN if q is None else q for q in found], dtype=np.uint8)
        return classes, np.array([q is None for q in found], dtype=np.bool_)

    def mean_no_value(self, words: Iterable[str]) -> npt.NDArray[np.bool_]:
        """Say for each distinct text in a value's place whether it is a known word for no value."""
        return np.array([_plain(word) in self._bad_values for word in words], dtype=np.bool_)

    def state_numbers(self, words: Iterable[str]) -> npt.NDArray[np.float64]:
        """Return the number of each distinct text that is a digital state, NaN for the others."""
        return np.array([self.states.get(_plain(word), np.nan) for word in words], dtype=np.float64)

    def _class(self, word: str) -> Quality | None:
        if self._decode is not None and (quality := self._decode(word)) is not None:
            return quality
        if word in self._known:
            return self._known[word]
        code = _code(word)
        if code is None:
            return None
        return next((q for low, high, q in self._spans if low <= code <= high), None)


def opc_ua(word: str) -> Quality | None:
    """Return the severity of an OPC UA status code, None when the text is none.

    The code is a number (decimal, ``0x``, or negative where 32 bits were stored with a sign), or a
    name such as ``BadNoCommunication``. Bits 30 and 31: 00 good, 01 uncertain, 10 bad; 11 is
    reserved and counts as bad.

    Source: IEC 62541-4 (OPC UA Part 4), StatusCode; names in IEC 62541-8 for data access.
    """
    code = _code(word)
    if code is None:
        text = word.casefold().removeprefix("opc").lstrip("_. ")
        starts = {"good": Quality.GOOD, "uncertain": Quality.UNCERTAIN, "bad": Quality.BAD}
        return next((q for start, q in starts.items() if text.startswith(start)), None)
    if not -(1 << (_STATUS_CODE_BITS - 1)) <= code < 1 << _STATUS_CODE_BITS:
        return None
    return (Quality.GOOD, Quality.UNCERTAIN, Quality.BAD, Quality.BAD)[(code >> 30) & 3]


def opc_classic(word: str) -> Quality | None:
    """Return the class of a quality word of OPC classic (OPC Data Access), None when it has none.

    Bits 6 and 7 of the low byte: 11 good, 01 uncertain, 00 bad; 10 has no meaning there. The high
    byte is the vendor's own.
    """
    code = _code(word)
    if code is None or not 0 <= code < 1 << 16:
        return None
    return (Quality.BAD, Quality.UNCERTAIN, None, Quality.GOOD)[(code >> 6) & 3]


_DECODERS: Mapping[str, Callable[[str], Quality | None]] = {
    "opc_ua": opc_ua,
    "opc_classic": opc_classic,
}


def _plain(word: str) -> str:
    return word.strip().strip('"').strip().casefold()


def _is_number(word: str) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True


def _code(word: str) -> int | None:
    matched = _CODE.fullmatch(word)
    if matched is None:
        return None
    return int(word, 16) if matched[1] is None else int(matched[1])


def _spans(words: Sequence[str]) -> list[tuple[int, int]]:
    """Return the codes and ranges of codes in a list of words."""
    spans = []
    for word in map(_plain, words):
        code, matched = _code(word), _RANGE.fullmatch(word)
        if code is not None:
            spans.append((code, code))
        elif matched:
            low, high = (int(end) for end in matched.groups())
            if low > high:
                raise ValueError(f"the range '{word}' is written from high to low")
            spans.append((low, high))
    return spans
