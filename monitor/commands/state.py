"""``lostwork state``: one state of water or steam, and what its exergy is."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.group import say, write_json
from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState
    from monitor.thermo.water import State

__all__ = ["state"]

_NEAR = 2.0
"""[K] p and T closer to saturation than this do not fix whether water is wet."""


@dataclass(frozen=True)
class _Row:
    key: str
    label: str
    value: float
    unit: str
    digits: int


def state(
    p: Annotated[
        str, typer.Option("--p", help="Pressure with its unit: '62 bar(a)', '11 bar(g)'.")
    ] = "",
    t: Annotated[str, typer.Option("--t", help="Temperature with its unit: '470 degC'.")] = "",
    x: Annotated[
        float | None,
        typer.Option("--x", min=0.0, max=1.0, help="Dryness fraction, with --p or with --t."),
    ] = None,
    t0: Annotated[str, typer.Option("--t0", help="Dead-state temperature.")] = "15 degC",
    p0: Annotated[
        str, typer.Option("--p0", help="Dead-state pressure, the barometer.")
    ] = "1.01325 bar(a)",
    *,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON in SI units.")] = False,
) -> None:
    """Print one state of water or steam.

    From pressure and temperature, or on saturation: enthalpy, entropy, volume, dryness, region,
    flow and non-flow exergy at a dead state (IAPWS-IF97).

    Example: lostwork state --p "62 bar(a)" --t "470 degC" --t0 "25 degC"

    Example: lostwork state --p "3 bar(g)" --x 0.95
    """
    from monitor.site.units import Quantity, quantity  # noqa: PLC0415
    from monitor.thermo.dead_state import dead_state  # noqa: PLC0415

    pressure0 = quantity(p0, Quantity.PRESSURE)
    dead = dead_state(quantity(t0, Quantity.TEMPERATURE), pressure0)
    if not _finite(dead.gibbs):
        raise WrongUseError(
            f"--t0 '{t0}' and --p0 '{p0}' are no surroundings; write -40 to 60 degC and about 1 bar"
        )
    pressure = quantity(p, Quantity.PRESSURE, barometer=pressure0) if p else None
    temperature = quantity(t, Quantity.TEMPERATURE) if t else None
    found = _state(pressure, temperature, x)
    if not bool(found.valid):
        raise WrongUseError(_outside(pressure, temperature))
    region = _region(found)
    rows = _rows(found, dead)
    if as_json:
        write_json(
            {row.key: row.value for row in rows}
            | {"region": region, "dead_state": {"T0_K": dead.temperature, "p0_Pa": dead.pressure}}
        )
    else:
        _print(rows, region, dead)
    _warn(found, x)


def _state(pressure: float | None, temperature: float | None, x: float | None) -> State:
    from monitor.thermo.water import state_pt, state_px, state_tx  # noqa: PLC0415

    given = [pressure is not None, temperature is not None, x is not None]
    if sum(given) != 2:  # noqa: PLR2004
        raise WrongUseError("give just two of --p, --t and --x: they fix the state")
    if pressure is not None and temperature is not None:
        return state_pt(pressure, temperature)
    if pressure is not None:
        return state_px(pressure, float(x if x is not None else 0.0))
    return state_tx(float(temperature or 0.0), float(x if x is not None else 0.0))


def _outside(pressure: float | None, temperature: float | None) -> str:
    from monitor.thermo.water import near_saturation  # noqa: PLC0415

    if pressure is not None and temperature is not None:
        if bool(near_saturation(pressure, temperature, 0.01)):
            return "on the saturation line p and T fix no state; give --x and one of --p and --t"
        return "outside IAPWS-IF97: 0 to 800 degC up to 1000 bar(a), to 2000 degC up to 500 bar(a)"
    return "no saturation there: it lies between 0 degC, 0.0061 bar(a) and 373.946 degC, 220.64 bar"


def _rows(found: State, dead: DeadState) -> list[_Row]:
    from monitor.thermo.exergy import flow_exergy, nonflow_exergy  # noqa: PLC0415
    from monitor.thermo.water import saturation_temperature  # noqa: PLC0415

    flow = flow_exergy(found.enthalpy, found.entropy, dead)
    stored = nonflow_exergy(found.internal_energy, found.volume, found.entropy, dead)
    boiling = saturation_temperature(found.pressure)
    return [
        _Row("pressure_Pa", "pressure p", float(found.pressure), "Pa", 4),
        _Row("temperature_K", "temperature T", float(found.temperature), "K", 2),
        _Row("saturation_temperature_K", "boils at", float(boiling), "K", 2),
        _Row("enthalpy_J_kg", "enthalpy h", float(found.enthalpy), "J/kg", 2),
        _Row("entropy_J_kgK", "entropy s", float(found.entropy), "J/(kg K)", 4),
        _Row("volume_m3_kg", "specific volume v", float(found.volume), "m3/kg", 6),
        _Row("dryness", "dryness x", float(found.dryness), "", 4),
        _Row("flow_exergy_J_kg", "flow exergy e_f", float(flow), "J/kg", 2),
        _Row("nonflow_exergy_J_kg", "non-flow exergy e", float(stored), "J/kg", 2),
    ]


_SHOWN = {"Pa": (1e-5, 0.0, "bar(a)"), "K": (1.0, -273.15, "degC"), "J/kg": (1e-3, 0.0, "kJ/kg"),
          "J/(kg K)": (1e-3, 0.0, "kJ/(kg K)")}  # fmt: skip


def _print(rows: list[_Row], region: str, dead: DeadState) -> None:
    for row in rows:
        scale, offset, unit = _SHOWN.get(row.unit, (1.0, 0.0, row.unit))
        if _finite(row.value):
            shown = f"{row.value * scale + offset:.{row.digits}f}"
            typer.echo(f"{row.label:20} {shown:>14} {unit}".rstrip())
    phase = "ice Ih" if bool(dead.frozen) else "liquid water"
    typer.echo(f"{'region':20} {region}")
    typer.echo(
        f"{'dead state':20} {float(dead.temperature) - 273.15:.2f} degC, "
        f"{float(dead.pressure) / 1e5:.5f} bar(a), {phase}"
    )


def _region(found: State) -> str:
    x = float(found.dryness)
    if not _finite(x):
        return "supercritical"
    if 0.0 < x < 1.0:
        return "wet steam"
    from monitor.thermo.water import saturation_temperature  # noqa: PLC0415

    off = float(found.temperature - saturation_temperature(found.pressure))
    if not _finite(off):
        return "above the critical pressure"
    if abs(off) < 1e-6:  # noqa: PLR2004
        return "saturated steam" if x == 1.0 else "saturated liquid"
    return f"superheated by {off:.2f} K" if off > 0 else f"liquid, {-off:.2f} K below boiling"


def _warn(found: State, x: float | None) -> None:
    from monitor.thermo.water import near_saturation  # noqa: PLC0415

    if x is None and bool(near_saturation(found.pressure, found.temperature, _NEAR)):
        say(
            f"warning: within {_NEAR:g} K of saturation p and T do not tell dry steam from wet; "
            "if this is wet steam, give --x"
        )


def _finite(value: object) -> bool:
    import math  # noqa: PLC0415

    return math.isfinite(float(value))  # type: ignore[arg-type]
