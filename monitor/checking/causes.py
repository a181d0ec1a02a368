"""From what each line tells to the few faults behind them, and who is told to look where."""

from __future__ import annotations

import re
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

from monitor.checking.lines import VERDICTS, Cause, Line
from monitor.checking.source_lines import FROZEN, clock_words
from monitor.checking.tag_lines import out_of_range, unreadable
from monitor.checking.typical import references

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from monitor.checking.clocks import Offset
    from monitor.checking.suspects import Suspect
    from monitor.checking.twins import Twin
    from monitor.site.load import Site

__all__ = ["Found", "causes", "explained"]

_SHOWN = 3
_MANY = 3
_SURE = 0.6
"""Whole contradictions that a suspect must explain before its figures are called wrong."""


@dataclass(frozen=True)
class Found:
    """What was found beside the lines.

    Attributes:
        shifts: sources whose times are off.
        pairs: tags with the same readings.
        suspects: misreadings that explain contradictions.
        odd: tags whose datum few others have, with the reason.
    """

    shifts: Mapping[str, Offset] = field(default_factory=dict)
    pairs: Sequence[Twin] = ()
    suspects: Sequence[Suspect] = ()
    odd: Mapping[str, str] = field(default_factory=dict)


_NOTHING = Found()


def causes(site: Site, lines: Sequence[Line], found: Found = _NOTHING) -> tuple[Cause, ...]:
    """Name the faults behind the lines, the one to put right first in front.

    What is seen directly (a source that cannot be read, a tag without readings) comes before what
    is inferred from contradictions.

    Args:
        site: the site.
        lines: what was found of each thing.
        found: what was found beside them.
    """
    told = [*_sources(site, lines, found.shifts), *_tags(site, lines)]
    named = {cause.subject for cause in told if cause.kind == "tag"}
    suspected = {tag: suspect for suspect in found.suspects for tag in suspect.guess.tags}
    for twin in found.pairs:
        told.append(_of_twin(site, twin, suspected))
        named |= {twin.copy, twin.of}
    told += [_of_suspect(one) for one in found.suspects if not named & set(one.guess.tags)]
    named |= {cause.subject for cause in told}
    told += [
        Cause("tag", name, reason, "look", guess=True)
        for name, reason in found.odd.items()
        if name not in named
    ]
    return tuple(sorted(told, key=lambda cause: -VERDICTS.index(cause.verdict)))


def _sources(site: Site, lines: Sequence[Line], shifts: Mapping[str, Offset]) -> Iterable[Cause]:
    columns = {x.subject for x in lines if x.kind == "tag" and x.reason.startswith("unreadable")}
    for line in lines:
        if line.kind != "source" or line.verdict == "ok":
            continue
        own = [name for name, tag in site.used_tags().items() if tag.source == line.subject]
        if line.reason.startswith("passed over") and set(own) & columns:
            continue  # the tag's own line says more
        dead = {x.subject for x in lines if x.kind == "tag" and x.verdict == "wrong"} & set(own)
        offset = shifts.get(line.subject)
        reason = line.reason if offset is None else clock_words(offset)
        yield Cause(
            "source",
            line.subject,
            reason,
            line.verdict,
            guess=offset is not None,
            explains=tuple(("tag", name) for name in own if name in dead) if offset is None else (),
            others=() if offset is None else offset.others,
        )


def _tags(site: Site, lines: Sequence[Line]) -> Iterable[Cause]:
    """Tags that are odd by themselves, with the streams and equipment that hang on them."""
    by_format = _unreadable_sources(site, lines)
    for source, tags in by_format.items():
        first = next(line for line in lines if line.subject == tags[0] and line.kind == "tag")
        yield Cause(
            "source",
            source,
            f"{len(tags)} of its tags are unreadable, {tags[0]} for one: {first.reason}",
            explains=tuple(("tag", tag) for tag in tags),
        )
    within = {tag for tags in by_format.values() for tag in tags}
    frozen = {x.subject for x in lines if x.kind == "source" and x.reason.startswith(FROZEN)}
    silent = {x.subject for x in lines if x.kind == "source" and x.verdict == "wrong"}
    for line in lines:
        tag = site.tags.get(line.subject)
        if line.kind != "tag" or line.verdict == "ok" or tag is None:
            continue
        if line.subject in within or (tag.source in silent and not line.figures):
            continue
        if tag.source in frozen and line.reason.startswith("stuck"):
            continue
        if out_of_range(line):
            continue  # another unit may explain it, which says more
        explains = _hanging(site, line.subject, lines) if line.verdict == "wrong" else ()
        yield Cause("tag", line.subject, line.reason, line.verdict, explains=explains)


def _unreadable_sources(site: Site, lines: Sequence[Line]) -> dict[str, list[str]]:
    """Sources of which so many tags cannot be read that it is the format, with these tags."""
    found: dict[str, list[str]] = {}
    for line in lines:
        if line.kind == "tag" and unreadable(line):
            found.setdefault(site.tags[line.subject].source, []).append(line.subject)
    used = [tag.source for tag in site.used_tags().values()]
    return {
        source: tags
        for source, tags in found.items()
        if len(tags) >= _MANY and len(tags) > used.count(source) / 2
    }


def _hanging(site: Site, tag: str, lines: Sequence[Line]) -> tuple[tuple[str, str], ...]:
    items = {item.id for item in site.items.values() if tag in _read_by(site, item.id)}
    streams = {s for i in items for s in (*site.items[i].ids("in"), *site.items[i].ids("out"))}
    return tuple(
        (line.kind, line.subject)
        for line in lines
        if line.verdict != "ok"
        and (
            (line.kind == "equipment" and line.subject in items)
            or (line.kind == "stream" and line.subject in streams)
        )
    )


def _read_by(site: Site, item: str) -> set[str]:
    own = {r.tag for r, _ in site.items[item].options.signals().values() if r.tag}
    around = (*site.items[item].ids("in"), *site.items[item].ids("out"))
    return own | {r.tag for s in around for _, r in references(site.streams[s]) if r.tag}


def _of_twin(site: Site, twin: Twin, suspected: Mapping[str, Suspect]) -> Cause:
    how = (
        f"reads the historian's '{site.tags[twin.of].historian_name}'"
        if twin.by_name
        else "has the same readings to the last digit"
    )
    copy, of = twin.copy, twin.of
    suspect = suspected.get(copy) or suspected.get(of)
    if suspect is not None and copy not in _blamed(suspect):
        copy, of = of, copy
    reason = f"duplicated: it {how}, as {of} does; check its source_name"
    return Cause(
        "tag",
        copy,
        reason,
        "wrong" if suspect else "look",
        guess=suspect is None,
        explains=_lines_of(suspect) if suspect else (),
        others=(of,),
    )


def _blamed(suspect: Suspect) -> set[str]:
    """The tags of which any could be the one."""
    return {tag for guess in (suspect.guess, *suspect.rivals) for tag in guess.tags}


def _of_suspect(one: Suspect) -> Cause:
    first, *crossed = one.guess.tags
    others = [tag for rival in one.rivals for tag in rival.tags]
    rivals = "".join(f"; or {r.tags[0]} {r.words}" for r in one.rivals)
    eased = list(dict.fromkeys(f"{_short(what)} of {subject}" for _, subject, what in one.explains))
    shown = ", ".join(eased[:_SHOWN])
    more = f" and {len(eased) - _SHOWN} more" if len(eased) > _SHOWN else ""
    sure = one.guess.how != "off" and one.gain > _SURE
    return Cause(
        "tag",
        first,
        f"{one.guess.words}{rivals}; with that put right {shown}{more} would come out",
        "wrong" if sure else "look",
        guess=True,
        explains=(*_lines_of(one), *(("tag", tag) for tag in crossed)),
        others=tuple(dict.fromkeys([*crossed, *others])),
    )


def _short(what: str) -> str:
    """A contradiction without the streams between which it lies."""
    return re.split(" (?:from|to|at) ", what, maxsplit=1)[0]


def _lines_of(one: Suspect) -> tuple[tuple[str, str], ...]:
    own = {("tag", tag) for tag in one.guess.tags}
    return tuple(
        pair for pair in dict.fromkeys((kind, subject) for kind, subject, _ in one.explains)
        if pair not in own
    )  # fmt: skip


def explained(lines: Sequence[Line], told: Sequence[Cause]) -> Iterable[Line]:
    """Yield the lines with the causes in them: at least as bad as the cause says, and by whom."""
    own: dict[tuple[str, str], Cause] = {(c.kind, c.subject): c for c in reversed(told)}
    by = {pair: c for c in reversed(told) for pair in c.explains}
    for line in lines:
        cause = own.get((line.kind, line.subject))
        if cause is not None and cause.reason not in line.reason:
            verdict = max(line.verdict, cause.verdict, key=VERDICTS.index)
            reason = "; ".join(filter(None, (cause.reason, line.reason)))
            yield replace(line, verdict=verdict, reason=reason)
        elif (line.kind, line.subject) in by and line.verdict != "ok":
            yield replace(line, reason=f"{line.reason} (see {by[line.kind, line.subject].subject})")
        else:
            yield line
