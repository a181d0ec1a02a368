"""A site file read, checked table by table and table against table, and made ready to compute.

All errors are collected and raised together: a person mends a site file in one go.
"""

from __future__ import annotations

import difflib
from collections import Counter
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, cast

import pydantic

import connectors
from monitor.equipment import KINDS
from monitor.equipment.base import Item, Kind, Medium, Options
from monitor.equipment.solve import Needs, Step, Unknown, competing, plan, spare_balances
from monitor.errors import Issue, SiteFileError
from monitor.site.flows import flow_complaints, meter_complaints
from monitor.site.issues import issue_of, no_such, option_issue, unique
from monitor.site.models import Reference, SiteFile, Stream, Tag
from monitor.site.raw import TAG_LISTS, read_toml, with_environment, with_tag_lists
from monitor.site.shifts import ShiftCalendar
from monitor.site.statements import check_stream
from monitor.site.tags import FLOWS
from monitor.site.units import PressureDatum, Quantity

if TYPE_CHECKING:
    from collections.abc import Collection, Iterable, Iterator, Mapping
    from pathlib import Path

__all__ = ["Site", "load_site"]


@dataclass(frozen=True)
class Site:
    """A site, ready to compute.

    Attributes:
        path: the site file.
        hash: SHA-256 of the site file and its tag lists, for provenance.
        file: the tables as validated.
        tags, streams, items: by name or id; items in the order of the site file.
        producer, consumer: stream id -> equipment id; a stream in one but not in the other crosses
            the site's boundary.
        steps: the order in which balances give what is not measured.
        calendar: shifts, days and months of the site's local time.
        open_ends: notes on what the file leaves unused, for ``check``.
    """

    path: Path
    hash: str
    file: SiteFile
    tags: Mapping[str, Tag]
    streams: Mapping[str, Stream]
    items: Mapping[str, Item]
    producer: Mapping[str, str]
    consumer: Mapping[str, str]
    steps: tuple[Step, ...]
    calendar: ShiftCalendar

    @property
    def folder(self) -> Path:
        """The site file's folder: relative paths in it start here."""
        return self.path.parent

    @property
    def id(self) -> str:
        """The site's short name, in every row of the store."""
        return self.file.site.id

    def counts_as_used(self, stream_id: str) -> bool:
        """Whether a stream that leaves the site counts as used (else as lost)."""
        stream = self.streams[stream_id]
        return (stream.counts_as or ("used" if stream.medium == "power" else "lost")) == "used"

    def crossing(self) -> dict[str, list[str]]:
        """The streams across the site's boundary, by the ledger's line that they count in."""
        leaving = [s for s in self.streams if s not in self.consumer]
        used = [s for s in leaving if self.counts_as_used(s)]
        return {
            "supplied": [s for s in self.streams if s not in self.producer],
            "used": used,
            "lost": [s for s in leaving if s not in used],
        }

    def used_tags(self) -> dict[str, Tag]:
        """Tags that some stream, equipment or the dead state reads, in the order of the file."""
        used = {reference.tag for _, _, reference, _ in _references(self) if reference.tag}
        return {name: tag for name, tag in self.tags.items() if name in used}


def load_site(path: Path) -> Site:
    """Read and check a site file.

    Args:
        path: a TOML file; see config/README.md for every key.

    Raises:
        SiteFileError: with every error found, each naming table, key, what was found and what would
            be right.
    """
    raw, digest = read_toml(path)
    issues: list[Issue] = []
    raw = with_environment(raw, issues)
    raw = with_tag_lists(raw, path, issues, digest)
    file = _validated(raw, path, issues)
    site = _joined(path, digest.hexdigest(), file, issues)
    if issues:
        raise SiteFileError(str(path), issues)
    return site


def _validated(raw: dict[str, Any], path: Path, issues: list[Issue]) -> SiteFile:
    try:
        return SiteFile.model_validate(raw)
    except pydantic.ValidationError as error:
        issues += [issue_of(e, raw, SiteFile) for e in error.errors()]
        raise SiteFileError(str(path), unique(issues)) from None


def _joined(path: Path, digest: str, file: SiteFile, issues: list[Issue]) -> Site:
    """Check the tables against each other and build the site."""
    _no_doubles("source", [s.id for s in file.source], issues)
    _no_doubles("tag", [t.name for t in file.tag], issues)
    _no_doubles("stream", [s.id for s in file.stream], issues)
    _no_doubles("equipment", [e.id for e in file.equipment], issues)
    _no_doubles("notify", [n.id for n in file.notify], issues)
    _check_sources(file, issues)
    streams = {s.id: s for s in file.stream}
    items = _items(file, streams, issues)
    producer, consumer = _ends(items.values(), issues)
    named = {s for e in file.equipment for port in e.ports for s in e.streams_at(port)}
    for stream in file.stream:
        check_stream(stream, producer, consumer, issues, named)
    needs = _needs(streams.values())
    planned = plan(list(items.values()), needs)
    items = {
        k: replace(
            v,
            spare=spare_balances(v, planned.steps),
            statements={s: streams[s] for s in (*v.ids("in"), *v.ids("out")) if s in streams},
        )
        for k, v in items.items()
    }
    # Equipment that could not be built has balances too: what seems unsolved may not be.
    whole = len(items) == len(file.equipment) and named <= producer.keys() | consumer.keys()
    for kind, stream_id in sorted(planned.unsolved) if whole or not issues else ():
        issues.append(_unsolved(kind, stream_id, items.values(), planned.unsolved))
    site = Site(
        path=path,
        hash=digest,
        file=file,
        tags={t.name: t for t in file.tag},
        streams=streams,
        items=items,
        producer=producer,
        consumer=consumer,
        steps=planned.steps,
        calendar=ShiftCalendar.of(file.shifts, file.site.time_zone),
    )
    _check_references(site, issues)
    for stream in streams.values():
        table = f"[[stream]] {stream.id!r}"
        issues += [Issue(table, "flow", text) for text in flow_complaints(stream, site.tags)]
    for tag in file.tag:
        table = f"[[tag]] {tag.name!r}"
        issues += [Issue(table, "meter", text) for text in meter_complaints(tag)]
    unbuilt = {e.id for e in file.equipment} - items.keys()
    for own in (f for f in file.drift.figure if f.equipment not in unbuilt):
        _check_drift_figure(own.equipment, own.figure, items, issues)
    return site


def _no_doubles(table: str, names: list[str], issues: list[Issue]) -> None:
    issues += [
        Issue(f"[[{table}]] {name!r}", "", f"stands {count} times; each needs a name of its own")
        for name, count in Counter(names).items()
        if count > 1
    ]


def _check_sources(file: SiteFile, issues: list[Issue]) -> None:
    ids = [s.id for s in file.source]
    for source in file.source:
        table = f"[[source]] {source.id!r}"
        if source.kind not in connectors.KINDS:
            issues.append(
                Issue(table, "kind", f"'{source.kind}' is not one of {', '.join(connectors.KINDS)}")
            )
            continue
        options = dict(source.model_extra or {})
        try:
            connectors.parse_options(source.kind, options)
        except pydantic.ValidationError as error:
            model = connectors.KINDS[source.kind].options
            issues += [option_issue(table, e, model) for e in error.errors()]
    for tag in file.tag:
        if tag.source not in ids:
            issues.append(
                Issue(f"[[tag]] {tag.name!r}", "source", no_such("source", tag.source, ids))
            )


def _items(file: SiteFile, streams: Mapping[str, Stream], issues: list[Issue]) -> dict[str, Item]:
    media: dict[str, Medium] = {s.id: s.medium for s in streams.values()}
    items: dict[str, Item] = {}
    for table in file.equipment:
        where = f"[[equipment]] {table.id!r}"
        kind = KINDS.get(table.kind)
        if kind is None:
            near = difflib.get_close_matches(table.kind, KINDS, n=1)
            hint = f"; did you mean '{near[0]}'?" if near else ""
            text = f"'{table.kind}' is not one of {', '.join(KINDS)}{hint}"
            issues.append(Issue(where, "kind", text))
            continue
        options = _options(where, kind, dict(table.model_extra or {}), issues)
        ports = {name: table.streams_at(name) for name in table.ports}
        _check_ports(where, kind, ports, media, issues)
        if options is None:
            continue
        known_ports = {p.name for p in kind.ports}
        item = Item(
            id=table.id,
            name=table.name or table.id,
            kind=kind,
            ports={k: v for k, v in ports.items() if k in known_ports},
            options=options,
        )
        issues += [Issue(where, "", text) for text in kind.complain(item, media)]
        items[table.id] = item
    return items


def _options(where: str, kind: Kind, given: dict[str, Any], issues: list[Issue]) -> Options | None:
    try:
        return kind.options.model_validate(given)
    except pydantic.ValidationError as error:
        issues += [option_issue(where, e, kind.options) for e in error.errors()]
        return None


def _check_ports(
    where: str,
    kind: Kind,
    ports: Mapping[str, tuple[str, ...]],
    media: Mapping[str, Medium],
    issues: list[Issue],
) -> None:
    known = {p.name: p for p in kind.ports}
    for name, ids in ports.items():
        if name not in known:
            near = difflib.get_close_matches(name, known, n=1)
            hint = f"; did you mean '{near[0]}'?" if near else f"; it has {', '.join(known)}"
            issues.append(Issue(where, f"ports.{name}", f"a {kind.name} has no such port{hint}"))
            continue
        for stream in ids:
            if stream not in media:
                text = no_such("stream", stream, media)
            elif media[stream] not in known[name].media:
                wanted = " or ".join(sorted(known[name].media))
                text = f"stream '{stream}' is {media[stream]}; this port takes {wanted}"
            else:
                continue
            issues.append(Issue(where, f"ports.{name}", text))
    for name, port in known.items():
        count = len(ports.get(name, ()))
        if count < port.least:
            issues.append(Issue(where, f"ports.{name}", "names no stream; it needs at least one"))
        if port.most is not None and count > port.most:
            issues.append(
                Issue(where, f"ports.{name}", f"names {count} streams; it takes {port.most}")
            )


def _ends(items: Iterable[Item], issues: list[Issue]) -> tuple[dict[str, str], dict[str, str]]:
    """Producer and consumer of each stream; each has one of them at most."""
    producer: dict[str, str] = {}
    consumer: dict[str, str] = {}
    for item in items:
        for direction, ends, word in (("out", producer, "leaves"), ("in", consumer, "enters")):
            for stream in item.ids(cast("Any", direction)):
                if stream in ends:
                    issues.append(
                        Issue(
                            f"[[equipment]] {item.id!r}",
                            "ports",
                            f"stream '{stream}' {word} '{ends[stream]}' already; a stream has one "
                            "producer and one consumer, so give this branch a stream of its own",
                        )
                    )
                ends[stream] = item.id
    return producer, consumer


def _needs(streams: Iterable[Stream]) -> Needs:
    streams = list(streams)
    return Needs(
        flow=frozenset(s.id for s in streams if s.flow == "balance"),
        enthalpy=frozenset(s.id for s in streams if s.enthalpy == "balance"),
        rate=frozenset(s.id for s in streams if "balance" in (s.power, s.heat)),
    )


def _unsolved(
    kind: str, stream: str, items: Iterable[Item], unsolved: Collection[Unknown]
) -> Issue:
    touching = [i for i in items if stream in (*i.ids("in"), *i.ids("out"))]
    balance = {"flow": "mass", "enthalpy": "energy", "rate": "energy"}[kind]
    key = {"flow": "flow", "enthalpy": "enthalpy", "rate": "power or heat"}[kind]
    found = (
        f"'balance' cannot be found: the {balance} balance of "
        f"{' and '.join(i.id for i in touching) or 'nothing'} has more unknowns than equations"
    )
    if balance == "energy" and any(i.options.heat_loss == "balance" for i in touching):
        found += ", or its energy residual is already its heat loss (heat_loss = 'none' frees it)"
    at = "; ".join(
        f"at {item.id} measure {_one_of(competing(item, unsolved))}" for item in touching
    )
    remedy = f"; {at}" if at else "; give the stream a place at some equipment, or a measurement"
    return Issue(f"[[stream]] {stream!r}", key, found + remedy)


def _one_of(unknown: tuple[str, ...]) -> str:
    if len(unknown) == 1:
        return unknown[0]
    return f"{', '.join(unknown[:-1])} or {unknown[-1]}"


def _references(site: Site) -> Iterator[tuple[str, str, Reference, Quantity]]:
    """Every place of the site that reads a tag or states a number: table, key, it, quantity."""
    dead = site.file.dead_state
    yield "[dead_state]", "temperature", dead.temperature, Quantity.TEMPERATURE
    yield "[dead_state]", "pressure", dead.pressure, Quantity.PRESSURE
    for stream in site.streams.values():
        for key, value, quantity in stream.references():
            yield f"[[stream]] {stream.id!r}", key, value, quantity
    for item in site.items.values():
        for key, (reference, quantity) in item.options.signals().items():
            yield f"[[equipment]] {item.id!r}", key, reference, quantity


def _check_references(site: Site, issues: list[Issue]) -> None:
    # A list that is not read would make a mistake of every reference to its tags.
    all_known = not any(issue.table == TAG_LISTS for issue in issues)
    for table, key, reference, quantity in _references(site):
        if reference.tag is None:
            unit = reference.unit
        elif reference.tag in site.tags:
            unit = site.tags[reference.tag].unit
        else:
            if all_known:
                issues.append(Issue(table, key, no_such("tag", reference.tag, site.tags)))
            continue
        metered = (
            key == "flow" and quantity is Quantity.MASS_FLOW and table.startswith("[[stream]]")
        )
        if unit is None or unit.quantity is quantity or (metered and unit.quantity in FLOWS):
            bad_datum = unit is not None and unit.datum is PressureDatum.DIFFERENCE
            if bad_datum:
                issues.append(Issue(table, key, "is a pressure difference; a pressure is wanted"))
            if key in {"superheat", "subcooling"} and unit is not None and unit.offset:
                said = f"is a difference of temperatures: give it in 'K', and not in '{unit.text}'"
                issues.append(Issue(table, key, said))
            continue
        found = unit.quantity.name.lower().replace("_", " ")
        wanted = quantity.name.lower().replace("_", " ")
        what = f"tag '{reference.tag}'" if reference.tag else "the fixed value"
        said = f"{what} is in '{unit.text}', a {found}; a {wanted} is wanted"
        if not reference.tag and unit.text == "1":
            said = f"{what} has no unit; write that of a {wanted} after it, with a space between"
        issues.append(Issue(table, key, said))
    barometer = site.file.dead_state.pressure
    gauge = site.tags.get(barometer.tag or "")
    if gauge is not None and gauge.unit.datum is PressureDatum.GAUGE:
        issues.append(
            Issue("[dead_state]", "pressure", "is a gauge pressure; the barometer is absolute")
        )


def _check_drift_figure(
    equipment: str, figure: str, items: Mapping[str, Item], issues: list[Issue]
) -> None:
    table = f"[[drift.figure]] {equipment!r}"
    if equipment not in items:
        issues.append(Issue(table, "equipment", no_such("piece of equipment", equipment, items)))
        return
    item = items[equipment]
    names = [f.name for f in item.kind.figures(item)]
    if figure not in names:
        known = ", ".join(names) or "none"
        issues.append(Issue(table, "figure", f"'{figure}' is not one of its figures: {known}"))
