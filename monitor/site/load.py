"""A site file read, checked table by table and table against table, and made ready to compute.

All errors are collected and raised together: a person mends a site file in one go.
"""

from __future__ import annotations

import csv
import difflib
import hashlib
import os
import re
import tomllib
from collections import Counter
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, cast

import pydantic

import connectors
from monitor.equipment import KINDS
from monitor.equipment.base import Item, Kind, Medium, Options
from monitor.equipment.solve import Needs, Step, plan, spare_balances
from monitor.errors import Issue, LostworkError, SiteFileError
from monitor.site.flows import flow_complaints, meter_complaints
from monitor.site.models import Meter, Reference, SiteFile, Stream, Tag
from monitor.site.shifts import ShiftCalendar
from monitor.site.tags import FLOWS
from monitor.site.units import PressureDatum, Quantity
from monitor.thermo.fuels import FuelError, exergy_ratio
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Mapping
    from pathlib import Path

__all__ = ["Site", "load_site"]

# Two fixed numbers that come this close to the saturation line [K] were meant to lie on it.
_SATURATION_ERROR = 0.5
_VARIABLE = re.compile(r"\$\{([A-Za-z_][A-Za-z0-9_]*)\}")


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
    raw, digest = _read_toml(path)
    issues: list[Issue] = []
    raw = _with_environment(raw, issues)
    raw = _with_tag_lists(raw, path, issues, digest)
    file = _validated(raw, path, issues)
    site = _joined(path, digest.hexdigest(), file, issues)
    if issues:
        raise SiteFileError(str(path), issues)
    return site


def _read_toml(path: Path) -> tuple[dict[str, Any], hashlib._Hash]:
    try:
        content = path.read_bytes()
    except OSError as error:
        raise LostworkError(
            f"{path}: cannot be read ({error.strerror}); name a site file, for example "
            "config/demo/site.toml"
        ) from error
    digest = hashlib.sha256(content)
    try:
        return tomllib.loads(content.decode("utf-8-sig")), digest
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise LostworkError(f"{path}: not a TOML file: {error}") from error


def _with_environment(raw: dict[str, Any], issues: list[Issue]) -> dict[str, Any]:
    """Put environment variables in place of ``${NAME}``, in every text of the file."""

    def fill(value: Any, where: str) -> Any:  # noqa: ANN401
        if isinstance(value, dict):
            return {k: fill(v, f"{where}.{k}" if where else k) for k, v in value.items()}
        if isinstance(value, list):
            return [fill(v, where) for v in value]
        if not isinstance(value, str):
            return value
        issues.extend(
            Issue(where, "", f"environment variable {name} is not set; set it and try again")
            for name in _VARIABLE.findall(value)
            if name not in os.environ
        )
        return _VARIABLE.sub(lambda m: os.environ.get(m[1], ""), value)

    return cast("dict[str, Any]", fill(raw, ""))


_RANGE_COLUMNS = ("range_low", "range_high")
_METER_COLUMNS = tuple(f"meter_{key}" for key in Meter.model_fields)
_LIST_COLUMNS = (
    *(key for key in Tag.model_fields if key not in {"range", "meter"}),
    *_RANGE_COLUMNS,
    *_METER_COLUMNS,
)


def _with_tag_lists(
    raw: dict[str, Any], path: Path, issues: list[Issue], digest: hashlib._Hash
) -> dict[str, Any]:
    """Add the rows of the CSV tag lists to the [[tag]] tables."""
    tags = list(raw.get("tag", []))
    lists = raw.get("tag_lists", [])
    for name in lists if isinstance(lists, list) else []:
        file = path.parent / str(name)
        try:
            content = file.read_bytes()
            text = content.decode("utf-8-sig")
        except (OSError, UnicodeDecodeError) as error:
            issues.append(Issue("tag_lists", str(name), f"cannot be read: {error}"))
            continue
        digest.update(content)
        tags += _rows_of(text, str(name), issues)
    return raw | {"tag": tags} if tags else raw


def _rows_of(text: str, name: str, issues: list[Issue]) -> Iterator[dict[str, Any]]:
    delimiter = (
        ";" if text.partition("\n")[0].count(";") > text.partition("\n")[0].count(",") else ","
    )
    reader = csv.DictReader(text.splitlines(), delimiter=delimiter)
    unknown = sorted(set(reader.fieldnames or ()) - set(_LIST_COLUMNS))
    if unknown or "name" not in (reader.fieldnames or ()):
        issues.append(
            Issue(
                f"tag list {name}",
                ", ".join(unknown),
                f"the header row must be made of {', '.join(_LIST_COLUMNS)}",
            )
        )
        return
    for row in reader:
        tag: dict[str, Any] = {
            k: v.strip()
            for k, v in row.items()
            if k in _LIST_COLUMNS and v and v.strip() and k not in _RANGE_COLUMNS
        }
        meter = {k.removeprefix("meter_"): tag.pop(k) for k in _METER_COLUMNS if k in tag}
        if meter:
            tag["meter"] = meter
        low, high = (row.get("range_low") or "").strip(), (row.get("range_high") or "").strip()
        if low or high:
            try:
                tag["range"] = (float(low), float(high))
            except ValueError:
                issues.append(
                    Issue(
                        f"tag list {name}, line {reader.line_num}",
                        "range_low, range_high",
                        f"'{low}' and '{high}' are not two numbers (decimal point, both or none)",
                    )
                )
        yield tag


def _validated(raw: dict[str, Any], path: Path, issues: list[Issue]) -> SiteFile:
    try:
        return SiteFile.model_validate(raw)
    except pydantic.ValidationError as error:
        issues += [_issue_of(e, raw, SiteFile) for e in error.errors()]
        raise SiteFileError(str(path), _unique(issues)) from None


def _unique(issues: list[Issue]) -> list[Issue]:
    return list(dict.fromkeys(issues))


def _issue_of(error: Any, raw: Mapping[str, Any], model: type[pydantic.BaseModel]) -> Issue:  # noqa: ANN401
    """Turn one pydantic error into a table, a key and a sentence."""
    location = [str(p) if not isinstance(p, int) else p for p in error["loc"]]
    table, rest = _table_of(location, raw)
    # pydantic adds the name of the union's member; the site file has no such key.
    key = ".".join(str(p) for p in rest if not _is_branch(str(p)))
    text = error["msg"].removeprefix("Value error, ")
    if error["type"] == "extra_forbidden":
        known = _keys_at(model, location)
        near = difflib.get_close_matches(str(location[-1]), known, n=1)
        hint = f"; did you mean '{near[0]}'?" if near else f"; known keys: {', '.join(known)}"
        text = f"is not a key of this table{hint}"
    elif error["type"] == "missing":
        text = "is missing"
    elif "input" in error and not isinstance(error["input"], (dict, list)):
        text = f"found {error['input']!r}: {text}"
    return Issue(table, key, text)


def _is_branch(part: str) -> bool:
    return part in {"Reference", "str", "list[str]"} or part.startswith(("literal[", "function-"))


def _table_of(location: list[Any], raw: Mapping[str, Any]) -> tuple[str, list[Any]]:
    head = str(location[0]) if location else ""
    if len(location) > 1 and isinstance(location[1], int):
        rows = raw.get(head, [])
        row = rows[location[1]] if location[1] < len(rows) else {}
        known = row.get("id") or row.get("name") if isinstance(row, dict) else None
        return f"[[{head}]] {known!r}" if known else f"[[{head}]] no. {location[1] + 1}", location[
            2:
        ]
    return f"[{head}]", location[1:]


def _keys_at(model: type[pydantic.BaseModel], location: list[Any]) -> list[str]:
    """Field names of the (nested) model that holds the key a location ends on."""
    here: Any = model
    for part in location[:-1]:
        if isinstance(part, int):
            continue
        field = getattr(here, "model_fields", {}).get(part)
        if field is None:
            break
        inner = [a for a in (field.annotation, *getattr(field.annotation, "__args__", ())) if a]
        models = [a for a in inner if isinstance(a, type) and issubclass(a, pydantic.BaseModel)]
        if not models:
            break
        here = models[0]
    return [field.alias or name for name, field in getattr(here, "model_fields", {}).items()]


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
    for stream in file.stream:
        _check_stream(stream, producer, consumer, issues)
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
    for kind, stream_id in sorted(planned.unsolved):
        issues.append(_unsolved(kind, stream_id, items.values()))
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
    for own in file.drift.figure:
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
            issues += [_option_issue(table, e, model) for e in error.errors()]
    for tag in file.tag:
        if tag.source not in ids:
            issues.append(
                Issue(f"[[tag]] {tag.name!r}", "source", _no_such("source", tag.source, ids))
            )


def _option_issue(table: str, error: Any, model: type[pydantic.BaseModel]) -> Issue:  # noqa: ANN401
    issue = _issue_of(error | {"loc": ("", *error["loc"])}, {}, model)
    if error["type"] == "extra_forbidden":
        known = list(model.model_fields)
        near = difflib.get_close_matches(str(error["loc"][-1]), known, n=1)
        hint = f"; did you mean '{near[0]}'?" if near else f"; known keys: {', '.join(known)}"
        return Issue(table, str(error["loc"][-1]), f"is not a key of this table{hint}")
    return Issue(table, issue.key, issue.text)


def _no_such(what: str, name: str, known: Iterable[str]) -> str:
    near = difflib.get_close_matches(name, list(known), n=1)
    hint = f"; did you mean '{near[0]}'?" if near else ""
    return f"'{name}' is not a {what} of this file{hint}"


def _items(file: SiteFile, streams: Mapping[str, Stream], issues: list[Issue]) -> dict[str, Item]:
    media: dict[str, Medium] = {s.id: s.medium for s in streams.values()}
    items: dict[str, Item] = {}
    for table in file.equipment:
        where = f"[[equipment]] {table.id!r}"
        kind = KINDS.get(table.kind)
        if kind is None:
            known = ", ".join(KINDS)
            issues.append(Issue(where, "kind", f"'{table.kind}' is not one of {known}"))
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
        issues += [_option_issue(where, e, kind.options) for e in error.errors()]
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
                text = _no_such("stream", stream, media)
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


def _check_stream(
    stream: Stream, producer: Mapping[str, str], consumer: Mapping[str, str], issues: list[Issue]
) -> None:
    produced, consumed = stream.id in producer, stream.id in consumer
    table = f"[[stream]] {stream.id!r}"
    if not produced and not consumed:
        issues.append(Issue(table, "", "meets no equipment; name it in a port or remove it"))
    if produced and consumed and stream.counts_as:
        issues.append(Issue(table, "counts_as", "the stream stays inside the site; leave it out"))
    if stream.counts_as == "supplied" and produced:
        issues.append(Issue(table, "counts_as", "'supplied' is for streams that enter the site"))
    if stream.counts_as in {"used", "lost"} and consumed:
        issues.append(
            Issue(table, "counts_as", f"'{stream.counts_as}' is for streams that leave the site")
        )
    issues += [
        Issue(table, key, "is for streams that enter the site; what they become is computed")
        for key in ("price", "co2")
        if produced and getattr(stream, key) is not None
    ]
    checks = {
        "water": _check_water,
        "fuel": _check_fuel,
        "power": _check_power,
        "heat": _check_heat,
    }
    issues += [Issue(table, key, text) for key, text in checks[stream.medium](stream)]


def _check_water(stream: Stream) -> Iterator[tuple[str, str]]:
    if stream.flow is None:
        yield "flow", "is missing: a tag, a fixed flow such as '3 t/h', or 'balance'"
    for key in ("power", "heat", "lower_heating_value", "exergy_ratio"):
        if getattr(stream, key) is not None:
            yield key, "does not belong to a stream of water or steam"
    yield from _check_state(stream)


def _check_state(stream: Stream) -> Iterator[tuple[str, str]]:
    """What a water stream says must fix its state, and not say it twice."""
    p, t, x = stream.pressure, stream.temperature, stream.dryness
    fixed_side = x is not None or stream.phase is not None
    if stream.enthalpy is not None:
        if p is None or t is not None or fixed_side:
            yield (
                "enthalpy",
                "'balance' goes with a pressure alone: leave out temperature, dryness and phase",
            )
    elif p is None and t is None:
        yield "pressure", "is missing: a stream needs pressure and temperature, or one with dryness"
    elif p is None or t is None:
        if not fixed_side:
            given, other = ("temperature", "pressure") if p is None else ("pressure", "temperature")
            hint = (
                f"alone does not fix the state; add {other}, "
                "dryness = 0.97, phase = 'vapour' or 'liquid', or enthalpy = 'balance'"
            )
            yield given, hint
    elif x is not None:
        hint = (
            "pressure, temperature and dryness are one too many: inside the wet dome the pressure "
            "alone gives the temperature, so leave temperature out"
        )
        yield "dryness", hint
    elif not fixed_side:
        yield from _check_saturation(p, t)


def _check_saturation(p: Reference, t: Reference) -> Iterator[tuple[str, str]]:
    """Two fixed numbers on the saturation line fix no state; measured ones are flagged later."""
    if p.fixed is None or t.fixed is None:
        return
    boiling = float(saturation_temperature(p.fixed))
    if abs(t.fixed - boiling) < _SATURATION_ERROR:
        hint = (
            f"lies at saturation ({boiling - 273.15:.2f} degC at this pressure), where p and T do "
            "not fix the state: give a dryness, or phase = 'vapour' or 'liquid', instead"
        )
        yield "temperature", hint


def _check_fuel(stream: Stream) -> Iterator[tuple[str, str]]:
    if not isinstance(stream.flow, Reference):
        yield "flow", "is missing: a tag or a fixed flow such as '3 t/h'"
    if stream.lower_heating_value is None:
        yield "lower_heating_value", "is missing, for example '48.5 MJ/kg'"
    if stream.exergy_ratio is None:
        try:
            exergy_ratio(stream.fuel)
        except FuelError as error:
            yield "fuel", str(error)


def _check_power(stream: Stream) -> Iterator[tuple[str, str]]:
    if stream.power is None:
        yield "power", "is missing: a tag, a fixed power such as '5 MW', or 'balance'"


def _check_heat(stream: Stream) -> Iterator[tuple[str, str]]:
    if stream.heat is None:
        yield "heat", "is missing: a tag, a fixed rate such as '300 kW', or 'balance'"


def _needs(streams: Iterable[Stream]) -> Needs:
    streams = list(streams)
    return Needs(
        flow=frozenset(s.id for s in streams if s.flow == "balance"),
        enthalpy=frozenset(s.id for s in streams if s.enthalpy == "balance"),
        rate=frozenset(s.id for s in streams if "balance" in (s.power, s.heat)),
    )


def _unsolved(kind: str, stream: str, items: Iterable[Item]) -> Issue:
    touching = [i.id for i in items if stream in (*i.ids("in"), *i.ids("out"))]
    balance = {"flow": "mass", "enthalpy": "energy", "rate": "energy"}[kind]
    key = {"flow": "flow", "enthalpy": "enthalpy", "rate": "power or heat"}[kind]
    return Issue(
        f"[[stream]] {stream!r}",
        key,
        f"'balance' cannot be found: the {balance} balance of "
        f"{' and '.join(touching) or 'nothing'} has more unknowns than equations "
        "(or its energy residual is already its heat loss); give one more measurement there, "
        "or heat_loss = 'none'",
    )


def _references(site: Site) -> Iterator[tuple[str, str, Reference, Quantity]]:
    """Every place of the site that reads a tag or states a number: table, key, it, quantity."""
    dead = site.file.dead_state
    yield "[dead_state]", "temperature", dead.temperature, Quantity.TEMPERATURE
    yield "[dead_state]", "pressure", dead.pressure, Quantity.PRESSURE
    expected = {
        "flow": Quantity.MASS_FLOW,
        "pressure": Quantity.PRESSURE,
        "temperature": Quantity.TEMPERATURE,
        "power": Quantity.POWER,
        "heat": Quantity.POWER,
        "boundary_temperature": Quantity.TEMPERATURE,
    }
    for stream in site.streams.values():
        for key, quantity in expected.items():
            value = getattr(stream, key)
            if isinstance(value, Reference):
                yield f"[[stream]] {stream.id!r}", key, value, quantity
    for item in site.items.values():
        for key, (reference, quantity) in item.options.signals().items():
            yield f"[[equipment]] {item.id!r}", key, reference, quantity


def _check_references(site: Site, issues: list[Issue]) -> None:
    for table, key, reference, quantity in _references(site):
        if reference.tag is None:
            unit = reference.unit
        elif reference.tag in site.tags:
            unit = site.tags[reference.tag].unit
        else:
            issues.append(Issue(table, key, _no_such("tag", reference.tag, site.tags)))
            continue
        metered = (
            key == "flow" and quantity is Quantity.MASS_FLOW and table.startswith("[[stream]]")
        )
        if unit is None or unit.quantity is quantity or (metered and unit.quantity in FLOWS):
            bad_datum = unit is not None and unit.datum is PressureDatum.DIFFERENCE
            if bad_datum:
                issues.append(Issue(table, key, "is a pressure difference; a pressure is wanted"))
            continue
        found = unit.quantity.name.lower().replace("_", " ")
        wanted = quantity.name.lower().replace("_", " ")
        what = f"tag '{reference.tag}'" if reference.tag else "the fixed value"
        issues.append(
            Issue(table, key, f"{what} is in '{unit.text}', a {found}; a {wanted} is wanted")
        )
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
        issues.append(Issue(table, "equipment", _no_such("piece of equipment", equipment, items)))
        return
    item = items[equipment]
    names = [f.name for f in item.kind.figures(item)]
    if figure not in names:
        known = ", ".join(names) or "none"
        issues.append(Issue(table, "figure", f"'{figure}' is not one of its figures: {known}"))
