"""The ways in which a site file may misread an instrument, each as a supposition to try out."""

from __future__ import annotations

import itertools
from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.checking.typical import Supposition, references, relative
from monitor.readings.site import neighbours
from monitor.site.tags import FLOWS
from monitor.site.units import PressureDatum, Quantity, parse_unit

if TYPE_CHECKING:
    from collections.abc import Collection, Iterator, Mapping

    from monitor.checking.typical import Typical
    from monitor.site.load import Site
    from monitor.site.tags import Tag

__all__ = ["Guess", "guesses"]

# Units that historians and control systems deliver. A decimal multiple is worth no line of its own
# where another one here has it.
_UNITS = {
    Quantity.PRESSURE: (
        "bar(g)", "bar(a)", "kPa(g)", "kPa(a)", "MPa(g)", "MPa(a)", "psi(g)", "psi(a)",
        "mbar(a)", "mbar(g)", "mmHg(a)", "mmHg(vac)", "inHg(vac)", "inHg(a)",
    ),
    Quantity.TEMPERATURE: ("degC", "degF", "K"),
    Quantity.MASS_FLOW: ("t/h", "kg/s", "kg/h", "klb/h", "lb/h", "lb/s", "t/d", "t/min"),
    Quantity.VOLUME_FLOW: ("m^3/h", "m^3/s", "l/s", "l/min", "gpm"),
    Quantity.NORM_VOLUME_FLOW: ("Nm3/h", "Sm3/h", "scf/h", "kNm3/h", "Nm3/s"),
    Quantity.POWER: ("kW", "MW", "W", "hp"),
}  # fmt: skip
_FACTORS = (0.25, 0.33, 0.5, 0.67, 0.8, 0.9, 1.11, 1.25, 1.5, 2.0, 3.0, 4.0)
_PRESSURE_FACTORS = (0.7, 0.8, 0.9, 1.1, 1.25, 1.4)
_KELVINS = (-80.0, -40.0, -20.0, -10.0, -5.0, 5.0, 10.0, 20.0, 40.0, 80.0)
_PLAIN = 0.12
"""Cost of a reading that is merely off: a named mistake explains as much with less."""
_SWAP, _SWAP_ALIKE, _SWAP_FAR = 0.04, 0.10, 0.14
_ODD = 0.05
_OTHER_DATUM = 0.03
"""On top, for another unit and another datum at once."""
_SAME = 1e-3
_TOGETHER, _LEAST_TOGETHER = 0.15, 3
_REST = 0.01
_ANYTHING = 49
_FLOWING_SHARES = (0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9)
"""Of a meter's range, tried where it shows nothing at all."""

How = Literal["unit", "datum", "swap", "off"]


@dataclass(frozen=True)
class Guess:
    """One misreading.

    Attributes:
        tags: the tag, or the two that are crossed.
        how: another unit, gauge for absolute, two tags crossed, or simply off.
        words: what it looks like.
        cost: how much it must explain before it is believed at all.
        supposition: the readings taken that way.
    """

    tags: tuple[str, ...]
    how: How
    words: str
    cost: float
    supposition: Supposition


def guesses(site: Site, day: Typical, doubted: Collection[str] = ()) -> list[Guess]:
    """List every misreading worth a trial.

    Args:
        site: the site.
        day: its typical readings.
        doubted: tags that may show anything else, since they show what another one does.
    """
    tags = {n: t for n, t in site.used_tags().items() if n in day.raw}
    usual = Counter((t.unit.quantity, t.unit.text) for t in tags.values())
    found = [g for name, tag in tags.items() for g in _of_tag(name, tag, tags, usual, day)]
    found += [g for name in doubted if name in tags for g in _anything(name, tags[name])]
    return [*found, *_restated_together(tags, day), *_crossed(site, tags, day)]


def _of_tag(
    name: str,
    tag: Tag,
    tags: Mapping[str, Tag],
    usual: Counter[tuple[Quantity, str]],
    day: Typical,
) -> Iterator[Guess]:
    raw, quantity = day.raw[name], tag.unit.quantity
    alike = sum(t.unit.quantity is quantity for t in tags.values())
    for text in _UNITS.get(quantity, ()):
        other = parse_unit(text)
        value = relative(tag.unit, other, raw, day.barometer)
        if abs(value - raw) <= _SAME * max(abs(raw), _SAME):
            continue
        # A unit that most gauges of the site have is the likelier one to have been meant.
        cost = _ODD * (1.0 - usual[quantity, text] / alike)
        cost += (
            _OTHER_DATUM if other.scale != tag.unit.scale and other.datum != tag.unit.datum else 0.0
        )
        same_scale = other.scale == tag.unit.scale and other.datum != tag.unit.datum
        how: How = "datum" if same_scale and quantity is Quantity.PRESSURE else "unit"
        restated = Supposition({name: value}, frozenset({name}))
        yield Guess((name,), how, _unit_words(tag, text, how), cost, restated)
    yield from _off(name, tag, raw)


def _unit_words(tag: Tag, text: str, how: How) -> str:
    if how == "datum":
        named = {
            PressureDatum.ABSOLUTE: "absolute",
            PressureDatum.GAUGE: "gauge",
            PressureDatum.VACUUM: "vacuum",
        }
        was = named.get(tag.unit.datum or PressureDatum.ABSOLUTE, "absolute")
        now = named[parse_unit(text).datum or PressureDatum.ABSOLUTE]
        return f"looks like {now} pressure taken as {was}: its unit is {text}, not {tag.unit.text}"
    return f"looks like {text}, where the site file says {tag.unit.text}"


def _off(name: str, tag: Tag, raw: float) -> Iterator[Guess]:
    quantity = tag.unit.quantity
    if quantity in FLOWS and tag.range is not None and raw < tag.range[0] + _REST * _span(tag):
        for share in _FLOWING_SHARES:
            value = tag.range[0] + share * _span(tag)
            words = "shows no flow where the balances have one"
            yield Guess((name,), "off", words, _PLAIN, Supposition({name: value}))
        return
    if quantity in FLOWS or quantity is Quantity.POWER:
        for factor in _FACTORS:
            words = f"seems to read about {1 / factor:.2g} times what flows"
            if quantity is Quantity.POWER:
                words = f"seems to read about {1 / factor:.2g} times the power"
            yield Guess((name,), "off", words, _PLAIN, Supposition({name: raw * factor}))
    if quantity is Quantity.PRESSURE:
        for factor in _PRESSURE_FACTORS:
            words = f"seems to read about {1 / factor:.2g} times the pressure"
            yield Guess((name,), "off", words, _PLAIN, Supposition({name: raw * factor}))
    if quantity is Quantity.TEMPERATURE:
        for kelvins in _KELVINS:
            words = f"seems to read about {abs(kelvins):g} K too {'low' if kelvins > 0 else 'high'}"
            moved = raw + kelvins / tag.unit.scale
            yield Guess((name,), "off", words, _PLAIN, Supposition({name: moved}))


def _anything(name: str, tag: Tag) -> Iterator[Guess]:
    """Values over a tag's whole range; likelier than a misreading, the tag being in doubt."""
    if tag.range is not None:
        for share in np.linspace(0.02, 0.98, _ANYTHING):
            value = tag.range[0] + float(share) * _span(tag)
            yield Guess((name,), "off", "shows another one's", 0.0, Supposition({name: value}))


def _span(tag: Tag) -> float:
    low, high = tag.range or (0.0, 0.0)
    return high - low


def _restated_together(tags: Mapping[str, Tag], day: Typical) -> Iterator[Guess]:
    """All tags of one source and unit in another unit: a tag list that was filled in by column."""
    alike: dict[tuple[str, str], list[str]] = {}
    for name, tag in tags.items():
        alike.setdefault((tag.source, tag.unit.text), []).append(name)
    for (_, text), names in alike.items():
        unit = parse_unit(text)
        for other in _UNITS.get(unit.quantity, ()) if len(names) >= _LEAST_TOGETHER else ():
            if other == text:
                continue
            values = {
                n: relative(unit, parse_unit(other), day.raw[n], day.barometer) for n in names
            }
            words = (
                f"it and the {len(names) - 1} other tags of its source that say {text} look like "
                f"{other}"
            )
            restated = Supposition(values, frozenset(names))
            yield Guess(tuple(names), "unit", words, _TOGETHER, restated)


def _crossed(site: Site, tags: Mapping[str, Tag], day: Typical) -> Iterator[Guess]:
    """Two tags, each with the other's numbers: p and T of a stream, or two alike side by side."""
    near: set[tuple[str, str]] = set()
    for stream in site.streams.values():
        read = {str(reference.tag) for _, reference in references(stream)}
        near.update(itertools.combinations(sorted(read & tags.keys()), 2))
    for name, beside in neighbours(site).items():
        near.update((min(name, other), max(name, other)) for other in beside)
    for one, other in itertools.combinations(sorted(tags), 2):
        alike = tags[one].unit.quantity is tags[other].unit.quantity
        beside_it = (one, other) in near
        a, b = day.raw[one], day.raw[other]
        of_stream = beside_it and _p_and_t(tags[one], tags[other])
        if not (alike or of_stream) or np.isclose(a, b, rtol=0.02):
            continue
        cost = _SWAP if of_stream else _SWAP_ALIKE if beside_it else _SWAP_FAR
        words = f"looks as if {one} and {other} were crossed: each fits with the other's readings"
        yield Guess((one, other), "swap", words, cost, Supposition({one: b, other: a}))


def _p_and_t(one: Tag, other: Tag) -> bool:
    return {one.unit.quantity, other.unit.quantity} == {Quantity.PRESSURE, Quantity.TEMPERATURE}
