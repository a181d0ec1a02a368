"""Look at a site before anything runs: store, sources, tags, streams, balances of the newest day.

Nothing is written. The figures are those of the daemon: the same readings, states and balances.
"""

from __future__ import annotations

import difflib
from contextlib import ExitStack
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

import numpy as np
import pandas as pd
import sqlalchemy as sa

import connectors
from connectors.base import ConnectorError, Probe, Quality
from monitor.cycle import read_window
from monitor.figures import compute
from monitor.flags import Flag, describe
from monitor.readings.condition import RANGE_ABOVE, RANGE_BELOW
from monitor.store.engine import is_sqlite, make_engine, place, reading, sqlite_path
from monitor.store.errors import StoreError
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from connectors.base import Connector
    from monitor.equipment.base import Item
    from monitor.site.load import Site
    from monitor.site.models import Tag
    from monitor.store.batch import FigureBatch

__all__ = ["Line", "Verdict", "check"]

Verdict = Literal["ok", "look", "wrong"]
_VERDICTS: tuple[Verdict, ...] = ("ok", "look", "wrong")
HOUR, DAY = 3600, 86400

_SHOWN = ("mass_flow_kg_s", "pressure_bar", "temperature_degc", "dryness")

LEAST_GOOD = 0.9
"""Share of good readings under which a tag is worth a look."""
IMBALANCE_LOOK, IMBALANCE_WRONG = 0.03, 0.15
"""Shares of what goes in: meters of 1 to 2 % explain the first, nothing but an error the second."""
RISE_LOOK, RISE_WRONG = 0.03, 0.15
"""Rises of absolute pressure where none can be: two gauges explain less than the first."""
FLOWING = 0.1
"""[kg/s] Above it a stream runs; one at rest may stand at any pressure."""
_PRESSURE_FALLS = frozenset({"flash_vessel", "header", "letdown", "trap_group", "turbine", "vent"})
"""Kinds in which nothing leaves above what enters; a pump may hide in the return of a user."""
_WATER_PORTS = frozenset({"blowdown", "condensate", "cooling_in", "cooling_out", "drain", "spray"})
_STEAM_PORTS = frozenset({"exhaust", "extraction", "steam"})


@dataclass(frozen=True)
class Line:
    """What was found about one thing.

    Attributes:
        kind: store, source, tag, stream or equipment.
        subject: its id or name.
        verdict: ``ok``, ``look`` (worth a person's eyes) or ``wrong`` (figures would be wrong).
        found: a few words with numbers and units.
        reason: why it is not ok, and what to do; empty when it is.
        figures: the numbers, for a machine.
    """

    kind: Literal["store", "source", "tag", "stream", "equipment"]
    subject: str
    verdict: Verdict
    found: str
    reason: str = ""
    figures: Mapping[str, float | int | str | None] = field(default_factory=dict)


def check(site: Site) -> list[Line]:
    """Look at everything that a site file names.

    Args:
        site: a site file that loads.

    Returns:
        Lines in the order store, sources, tags, streams, equipment. A source that cannot be read is
        a line of its own; what hangs on it is then told as far as it goes.
    """
    lines = [_store(site)]
    probes: dict[str, Probe] = {}
    with ExitStack() as stack:
        opened: dict[str, Connector] = {}
        for source in site.file.source:
            try:
                options = dict(source.model_extra or {})
                connector = connectors.open_source(source.kind, options, site.folder)
                stack.callback(connector.close)
                probes[source.id] = connector.probe()
                opened[source.id] = connector
            except ConnectorError as error:
                lines.append(Line("source", source.id, "wrong", "cannot be read", str(error)))
        ends = [probe.last for probe in probes.values() if probe.last is not None]
        if not ends:
            return lines + [_source(i, probe, 0) for i, probe in probes.items()]
        return lines + list(_look(site, opened, probes, max(ends)))


def _store(site: Site) -> Line:
    """Reach the store, without making one: the first run does that."""
    try:
        engine = make_engine(site.file.store.url, site.folder)
        if is_sqlite(engine) and not sqlite_path(engine).exists():
            return Line("store", site.id, "ok", f"{place(engine)}; the first run makes it")
        try:
            with reading(engine, "check it") as connection:
                connection.execute(sa.select(1))
        finally:
            engine.dispose()
    except StoreError as error:
        return Line("store", site.id, "wrong", "cannot be used", str(error))
    return Line("store", site.id, "ok", place(engine))


def _look(
    site: Site, opened: Mapping[str, Connector], probes: Mapping[str, Probe], newest: pd.Timestamp
) -> Iterator[Line]:
    interval = int(site.file.site.interval)
    end = (int(newest.timestamp()) // interval + 1) * interval
    start = (end - DAY) // HOUR * HOUR
    read = read_window(site, opened, start, end)
    day = read.readings[
        (read.readings["time"] >= pd.Timestamp(start, unit="s", tz="UTC"))
        & (read.readings["time"] < pd.Timestamp(end, unit="s", tz="UTC"))
    ]
    parts: dict[str, pd.DataFrame] = {
        str(name): part for name, part in day.groupby("tag", observed=True)
    }
    for source_id, probe in probes.items():
        own = [n for n, tag in site.used_tags().items() if tag.source == source_id]
        yield _source(source_id, probe, sum(len(parts[n]) for n in own if n in parts))
    hours = (end - start) / HOUR
    for name, tag in site.used_tags().items():
        if tag.source in probes:
            yield _tag(tag, parts.get(name), probes[tag.source], hours)
    batch = compute(site, read, start, end).batch
    yield from _streams(site, batch)
    yield from _equipment(site, batch)


def _source(source_id: str, probe: Probe, rows: int) -> Line:
    figures: dict[str, float | int | str | None] = {
        "tags": len(probe.tags),
        "first": None if probe.first is None else probe.first.isoformat(),
        "last": None if probe.last is None else probe.last.isoformat(),
        "readings_newest_day": rows,
        "passed_over": sum(problem.count for problem in probe.problems),
    }
    if probe.last is None or probe.first is None:
        reason = "it holds no reading; check its path, query and time format"
        return Line("source", source_id, "wrong", f"empty; {probe.detail}", reason, figures)
    found = (
        f"{probe.detail}; {probe.first:%Y-%m-%d %H:%M} to {probe.last:%Y-%m-%d %H:%M} UTC; "
        f"{rows} readings in the newest day"
    )
    if rows == 0:
        reason = "none of the site's tags has a reading in the newest day of data"
        return Line("source", source_id, "wrong", found, reason, figures)
    if probe.problems:
        worst = max(probe.problems, key=lambda problem: problem.count)
        reason = f"passed over {figures['passed_over']}, most: {worst.what} ({worst.where})"
        return Line("source", source_id, "look", found, reason, figures)
    return Line("source", source_id, "ok", found, "", figures)


def _tag(tag: Tag, part: pd.DataFrame | None, probe: Probe, hours: float) -> Line:
    if part is None or part.empty:
        return _absent(tag, probe)
    value = part["value"].to_numpy(dtype=np.float64)
    quality = part["quality"].to_numpy()
    finite = np.isfinite(value)
    good = finite & (quality == Quality.GOOD)
    outside = finite & _outside(value, tag)
    last = value[finite][-1] if finite.any() else float("nan")
    gap = float(part["time"].diff().max().total_seconds()) if len(part) > 1 else hours * HOUR
    figures: dict[str, float | int | str | None] = {
        "unit": tag.unit.text,
        "last": float(last),
        "readings_per_hour": len(part) / hours,
        "good_share": float(good.mean()),
        "outside_share": float(outside.mean()),
        "longest_gap_s": gap,
    }
    found = (
        f"{last:.4g} {tag.unit.text}; {len(part) / hours:.3g} readings/h; "
        f"{100 * good.mean():.0f} % good"
    )
    verdict, reason = _judge_tag(tag, value[finite & ~outside], figures)
    return Line("tag", tag.name, verdict, found, reason, figures)


def _judge_tag(
    tag: Tag, usable: np.ndarray[tuple[int], np.dtype[np.float64]], figures: Mapping[str, object]
) -> tuple[Verdict, str]:
    outside, good = float(str(figures["outside_share"])), float(str(figures["good_share"]))
    gap = float(str(figures["longest_gap_s"]))
    if not usable.size:
        low, high = tag.range or (0, 0)
        return "wrong", (
            f"all outside its range {low:g} to {high:g} {tag.unit.text}; is the unit right?"
            if outside
            else "no value can be used; the historian calls all of them bad or they are no numbers"
        )
    if outside > 1 - LEAST_GOOD:
        return "look", f"{100 * outside:.0f} % of its values are outside the instrument's range"
    if good < LEAST_GOOD:
        return "look", "the historian calls many of its readings bad or uncertain"
    if gap > tag.hold:
        return "look", (
            f"longest gap {gap / 60:.0f} min, longer than its hold of {tag.hold / 60:.0f} min; "
            "a historian that reports by exception needs a longer hold"
        )
    if usable.size > 1 and np.ptp(usable) == 0:
        return "look", "it did not move all day; frozen, or not in service?"
    return "ok", ""


def _outside(
    value: np.ndarray[tuple[int], np.dtype[np.float64]], tag: Tag
) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    if tag.range is None:
        return np.zeros(value.shape, dtype=np.bool_)
    low, high = tag.range
    span = high - low
    return np.asarray((value < low - RANGE_BELOW * span) | (value > high + RANGE_ABOVE * span))


def _absent(tag: Tag, probe: Probe) -> Line:
    name = tag.historian_name
    if name in probe.tags:
        reason = f"it has no reading in the newest day of source '{tag.source}'"
        return Line("tag", tag.name, "wrong", "no readings", reason)
    near = difflib.get_close_matches(name, probe.tags, n=1)
    hint = f"did you mean '{near[0]}'?" if near else "check its source and source_name"
    reason = f"source '{tag.source}' has no tag '{name}'; {hint}"
    return Line("tag", tag.name, "wrong", "not found", reason)


def _streams(site: Site, batch: FigureBatch) -> Iterator[Line]:
    newest = batch.streams[batch.streams["time"] >= batch.end - HOUR]
    for stream_id, cells in newest.groupby("subject", sort=False):
        stream = site.streams[str(stream_id)]
        means = cells.drop(columns=["subject", "time", "flag"]).mean()
        flags = cells["flag"].to_numpy(dtype=np.int64)
        figures: dict[str, float | int | str | None] = {
            name: _number(means[name]) for name in (*_SHOWN, "exergy_live_kw")
        }
        figures["flags"] = describe(_all(flags))
        if stream.medium == "water":
            superheat = _superheat(means["pressure_bar"], means["temperature_degc"])
            figures["superheat_k"] = _number(superheat)
            found = _water_words(means, superheat)
        else:
            found = f"{means['energy_kw']:.4g} kW of {stream.medium}"
        verdict, reason = _judge_stream(flags, site.file.site.saturation_band)
        yield Line("stream", stream.id, verdict, found, reason, figures)


def _superheat(bar: float, degc: float) -> float:
    return float(degc + 273.15 - saturation_temperature(bar * 1e5))


def _water_words(means: pd.Series[float], superheat: float) -> str:
    flow = f"{3.6 * means['mass_flow_kg_s']:.4g} t/h"
    state = f"{means['pressure_bar']:.4g} bar(a), {means['temperature_degc']:.4g} degC"
    dryness = means["dryness"]
    if 0 < dryness < 1:
        return f"{flow}, {state}, wet, x = {dryness:.3f}"
    if not np.isfinite(superheat):
        return f"{flow}, {state}"
    if abs(superheat) < 0.01:  # noqa: PLR2004 - a hundredth of a kelvin is saturation for anyone
        return f"{flow}, {state}, saturated {'steam' if dryness > 0.5 else 'liquid'}"  # noqa: PLR2004
    word = (
        f"superheated {superheat:.1f} K"
        if superheat > 0
        else f"liquid, {-superheat:.1f} K from boiling"
    )
    return f"{flow}, {state}, {word}"


def _judge_stream(
    flags: np.ndarray[tuple[int], np.dtype[np.int64]], band: float
) -> tuple[Verdict, str]:
    def share(bit: Flag) -> float:
        return float(((flags & bit) != 0).mean())

    half = 0.5
    if share(Flag.OUT_OF_REGION) > half:
        return "wrong", "its pressure and temperature are outside the steam tables; check units"
    if share(Flag.MISSING) > half:
        return "wrong", "its state or flow is missing for most of the newest hour"
    if share(Flag.NEAR_SATURATION) > 0:
        return "look", (
            f"within {band:g} K of saturation p and T do not fix the state; add dryness, phase, or "
            "enthalpy = 'balance'"
        )
    if share(Flag.SIDE_ASSUMED | Flag.UNCERTAIN) > half and share(Flag.SIDE_ASSUMED) > half:
        return "look", "p and T tell another phase than the site file states"
    if share(Flag.MISSING) > 0:
        return "look", "its state or flow is missing for a part of the newest hour"
    return "ok", ""


def _equipment(site: Site, batch: FigureBatch) -> Iterator[Line]:
    streams = batch.streams.groupby("subject")[["mass_flow_kg_s", "energy_kw"]].mean().abs()
    running = batch.streams[batch.streams["mass_flow_kg_s"] > FLOWING]
    medians = running.groupby("subject")["pressure_bar"].median().dropna()
    bar = {str(stream): float(value) for stream, value in medians.items()}
    wet = running.groupby("subject")["dryness"].median().dropna()
    dryness = {str(stream): float(value) for stream, value in wet.items()}
    for item_id, cells in batch.equipment.groupby("subject", sort=False):
        item = site.items[str(item_id)]
        means = cells.drop(columns=["subject", "time", "flag"]).mean()
        inlets = streams.loc[list(item.ids("in"))].sum()
        shares = {
            "mass_imbalance_share": _share(means["mass_imbalance_kg_s"], inlets["mass_flow_kg_s"]),
            "energy_imbalance_share": _share(means["energy_imbalance_kw"], inlets["energy_kw"]),
            "closure_share": _share(means["closure_live_kw"], means["exergy_in_live_kw"]),
        }
        destroyed, entered = means["destroyed_live_kw"], means["exergy_in_live_kw"]
        found = (
            f"mass {_percent(shares['mass_imbalance_share'])}, energy "
            f"{_percent(shares['energy_imbalance_share'])}, closure "
            f"{_percent(shares['closure_share'])}; destroys {destroyed:.4g} kW"
        )
        figures: dict[str, float | int | str | None] = {k: _number(v) for k, v in shares.items()}
        figures |= {"destroyed_live_kw": _number(destroyed), "exergy_in_live_kw": _number(entered)}
        verdict, reason = _judge_equipment(shares, destroyed, entered)
        for told in (_judge_phase(item, dryness), _judge_pressure(item, bar)):
            if told[0] != "ok" and _VERDICTS.index(told[0]) >= _VERDICTS.index(verdict):
                verdict, reason = told
        yield Line("equipment", item.id, verdict, found, reason, figures)


def _judge_equipment(
    shares: Mapping[str, float], destroyed: float, entered: float
) -> tuple[Verdict, str]:
    if not np.isfinite(destroyed):
        return "wrong", "its balance cannot be drawn up; see the tags and streams above"
    if destroyed < -0.02 * abs(entered):
        return "wrong", "it seems to create exergy: two streams swapped, or a reading is wrong"
    named = {"mass_imbalance_share": "mass", "energy_imbalance_share": "energy"}
    for key, word in named.items():
        size = abs(shares[key])
        if np.isfinite(size) and size > IMBALANCE_LOOK:
            verdict: Verdict = "wrong" if size > IMBALANCE_WRONG else "look"
            kind = "in than out" if shares[key] > 0 else "out than in"
            return (
                verdict,
                f"{_percent(size)} more {word} goes {kind}; a meter, or a missing stream",
            )
    return "ok", ""


def _judge_phase(item: Item, dryness: Mapping[str, float]) -> tuple[Verdict, str]:
    """Whether steam runs where water should, or water where steam should."""
    for port, streams in item.ports.items():
        for stream in streams:
            half = 0.5
            if port in _WATER_PORTS and dryness.get(stream, 0.0) > half:
                return "wrong", f"'{stream}' at port {port} is steam; correct its p and T, or tags"
            if port in _STEAM_PORTS and dryness.get(stream, 1.0) < half:
                # A user may be heated by hot water; nothing else takes it at its steam port.
                verdict: Verdict = "look" if item.kind.name == "user" else "wrong"
                return verdict, f"'{stream}' at port {port} is water; correct its p and T, or tags"
    return "ok", ""


def _judge_pressure(item: Item, bar: Mapping[str, float]) -> tuple[Verdict, str]:
    """Whether a stream leaves at a higher pressure than anything enters, which needs a pump."""
    if item.kind.name not in _PRESSURE_FALLS:
        return "ok", ""
    entering = max((bar[i] for i in item.ids("in") if i in bar), default=float("inf"))
    outlet = max((i for i in item.ids("out") if i in bar), key=lambda i: bar[i], default=None)
    if outlet is None or bar[outlet] <= (1 + RISE_LOOK) * entering:
        return "ok", ""
    return "wrong" if bar[outlet] > (1 + RISE_WRONG) * entering else "look", (
        f"'{outlet}' leaves at {bar[outlet]:.4g} bar(a), above the {entering:.4g} bar(a) of what "
        "enters; correct the unit (gauge for absolute?), the tag, or the streams"
    )


def _share(part: float, whole: float) -> float:
    return float(part / whole) if whole and np.isfinite(whole) else float("nan")


def _percent(share: float) -> str:
    return f"{100 * share:.1f} %" if np.isfinite(share) else "-"


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _all(flags: np.ndarray[tuple[int], np.dtype[np.int64]]) -> int:
    return int(np.bitwise_or.reduce(flags)) if flags.size else 0
