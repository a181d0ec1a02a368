"""What a [[stream]] table states must fix its state and its rate, and not say it twice."""

from __future__ import annotations

from typing import TYPE_CHECKING

from monitor.errors import Issue
from monitor.site.models import Reference, Stream
from monitor.thermo.fuels import FuelError, exergy_ratio
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Collection, Iterator, Mapping

__all__ = ["check_stream"]

# Two fixed numbers that come this close to the saturation line [K] were meant to lie on it.
_SATURATION_ERROR = 0.5


def check_stream(
    stream: Stream,
    producer: Mapping[str, str],
    consumer: Mapping[str, str],
    issues: list[Issue],
    named: Collection[str],
) -> None:
    """Add what is wrong with one stream's table to the issues.

    Args:
        stream: the table.
        producer: the equipment that each stream leaves.
        consumer: the equipment that each stream enters.
        issues: where to add.
        named: streams that any port names; equipment with a mistake of its own meets none yet.
    """
    produced, consumed = stream.id in producer, stream.id in consumer
    table = f"[[stream]] {stream.id!r}"
    if stream.id not in named:
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


_WITH_PRESSURE_ALONE = ("enthalpy", "superheat", "subcooling", "throttling_test")
"""Each fixes the state of a stream together with its pressure, and with nothing else."""


def _check_state(stream: Stream) -> Iterator[tuple[str, str]]:
    """What a water stream says must fix its state, and not say it twice."""
    given = [key for key in _WITH_PRESSURE_ALONE if getattr(stream, key) is not None]
    if given:
        yield from _check_with_pressure_alone(stream, given)
    else:
        yield from _check_pair(stream)


def _check_with_pressure_alone(stream: Stream, given: list[str]) -> Iterator[tuple[str, str]]:
    others = (stream.temperature, stream.dryness, stream.phase)
    if stream.pressure is None or any(v is not None for v in others) or len(given) > 1:
        what = "'balance'" if given[0] == "enthalpy" else "it"
        hint = f"{what} goes with a pressure alone: leave out temperature, dryness and phase"
        if len(given) > 1:
            hint += f"; and of {' and '.join(given)} keep one"
        yield given[0], hint
    for key in ("superheat", "subcooling"):
        degree = getattr(stream, key)
        if degree is not None and degree.fixed is not None and degree.fixed <= 0.0:
            hint = "is not above 0 K; for a saturated stream give phase = 'vapour' or 'liquid'"
            yield key, hint


def _check_pair(stream: Stream) -> Iterator[tuple[str, str]]:
    """Pressure and temperature, or one of them with a dryness or a phase."""
    p, t, x = stream.pressure, stream.temperature, stream.dryness
    fixed_side = x is not None or stream.phase is not None
    if p is None and t is None:
        yield "pressure", "is missing: a stream needs pressure and temperature, or one with dryness"
    elif p is None or t is None:
        if not fixed_side:
            given, other = ("temperature", "pressure") if p is None else ("pressure", "temperature")
            hint = (
                f"alone does not fix the state; add {other}, "
                "dryness = 0.97, phase = 'vapour' or 'liquid', a superheat or a subcooling, "
                "or enthalpy = 'balance'"
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
