"""Water states: this package beside what a user would call by hand.

    python benchmarks/thermo.py [points]

Prints microseconds of processor time per state and the ratio, best of seven, all in one run:
compare the ratios, the times are the machine's.
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
from CoolProp import CoolProp
from CoolProp.CoolProp import PropsSI

from monitor.thermo.dead_state import dead_state
from monitor.thermo.exergy import flow_exergy
from monitor.thermo.water import (
    saturated,
    saturation_temperature,
    state_ph,
    state_ps,
    state_pt,
    state_px,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

REPEATS = 7


def _best(call: Callable[[], object]) -> float:
    times = []
    for _ in range(REPEATS):
        start = time.process_time()
        call()
        times.append(time.process_time() - start)
    return min(times)


def _bare(pressure: np.ndarray, temperature: np.ndarray) -> Callable[[], object]:
    state = CoolProp.AbstractState("IF97", "Water")
    outputs = np.array([CoolProp.iHmass, CoolProp.iSmass, CoolProp.iDmass], dtype=np.int32)
    out, status = np.empty((pressure.size, 3)), np.empty(pressure.size, dtype=np.int32)
    return lambda: state.fast_evaluate(
        CoolProp.PT_INPUTS, pressure, temperature, outputs, out, status
    )


def _props(output: str, pressure: np.ndarray, name: str, value: np.ndarray) -> object:
    return PropsSI(output, "P", pressure, name, value, "IF97::Water")


@dataclass(frozen=True)
class _Row:
    name: str
    ours: Callable[[], object]
    by_hand: str
    theirs: Callable[[], object]


def _states_and_exergy(points: int, rng: np.random.Generator) -> Iterator[_Row]:
    """A stream's state, and its exergy at a live dead state, beside the bare batch call."""
    pressure = rng.uniform(1e5, 12e6, points)
    temperature = saturation_temperature(pressure) + rng.uniform(5.0, 300.0, points)
    # One dead state a cell serves every stream of a site; it is made once, outside.
    dead = dead_state(rng.uniform(263.15, 303.15, points), 1e5)
    bare = _bare(pressure, temperature)

    def with_exergy() -> object:
        state = state_pt(pressure, temperature)
        return flow_exergy(state.enthalpy, state.entropy, dead)

    yield _Row("p,T: h, s, v", lambda: state_pt(pressure, temperature), "bare fast_evaluate", bare)
    yield _Row("p,T: h, s, v, x, exergy", with_exergy, "bare fast_evaluate", bare)
    critical, hot = rng.uniform(23e6, 60e6, points), rng.uniform(630.0, 660.0, points)
    yield _Row(
        "p,T in region 3, basic equation",
        lambda: state_pt(critical, hot),
        "bare fast_evaluate, v(p,T)",
        _bare(critical, hot),
    )
    low = pressure / 12.0
    yield _Row(
        "saturated: h, s, v of both",
        lambda: saturated(low),
        "PropsSI p,x: h'' alone",
        lambda: _props("Hmass", low, "Q", np.ones_like(low)),
    )


def _isobars(points: int, rng: np.random.Generator) -> Iterator[_Row]:
    """From p,s and p,h: T, h or s, v and x, beside one property of PropsSI."""
    uniform = rng.uniform
    pressure = uniform(1e5, 12e6, points)
    boiling = saturation_temperature(pressure)
    high, critical = uniform(17e6, 40e6, points), uniform(16.6e6, 21.5e6, points)
    beside = saturation_temperature(critical)
    where = {
        "superheated": (pressure, state_pt(pressure, boiling + uniform(5.0, 300.0, points))),
        "expanded to a twelfth": (
            pressure / 12.0,
            state_pt(pressure, boiling + uniform(5.0, 300.0, points)),
        ),
        "liquid below 165 bar": (pressure, state_pt(pressure, uniform(280.0, 370.0, points))),
        "170 to 400 bar, steam": (high, state_pt(high, uniform(800.0, 1073.0, points))),
        "170 to 400 bar, liquid": (high, state_pt(high, uniform(280.0, 620.0, points))),
        "region 3, liquid": (critical, state_pt(critical, beside - uniform(0.05, 0.5, points))),
        "region 3, vapour": (critical, state_pt(critical, beside + uniform(0.05, 0.5, points))),
        "region 3, wet": (critical, state_px(critical, uniform(0.0, 1.0, points))),
    }
    for name, (p, state) in where.items():
        s, h = state.entropy, state.enthalpy
        assert state_ps(p, s).valid.all()  # noqa: S101 - failed states measure nothing
        yield _Row(
            f"p,s {name}",
            partial(state_ps, p, s),
            "PropsSI p,s: h alone",
            partial(_props, "Hmass", p, "Smass", s),
        )
        if name in {"superheated", "170 to 400 bar, steam", "region 3, wet"}:
            yield _Row(
                f"p,h {name}",
                partial(state_ph, p, h),
                "PropsSI p,h: s alone",
                partial(_props, "Smass", p, "Hmass", h),
            )


def _consistency(points: int, rng: np.random.Generator) -> None:
    """How far h at the T found is from h: 16.5 to 100 MPa, where PropsSI has an answer and else."""
    pressure = rng.uniform(16.6e6, 100e6, points)
    state = state_pt(pressure, rng.uniform(280.0, 1073.0, points))
    found = state_ps(pressure, state.entropy)
    again = state_pt(pressure, found.temperature)
    print(
        "largest |h(p, T found) - h|, 165 to 1000 bar: "
        f"{np.nanmax(np.abs(again.enthalpy - found.enthalpy)) / 1e3:.1e} kJ/kg"
    )


def main(points: int) -> None:
    rng = np.random.default_rng(1)
    rows = [*_states_and_exergy(points, rng), *_isobars(points, rng)]
    print(f"{points} states, microseconds each")
    print(f"{'here':40}{'us':>8}   {'by hand':28}{'us':>8}{'by hand / here':>16}")
    for row in rows:
        row.ours()  # the first p-h and p-s calls fit their estimates
        ours, theirs = (_best(f) / points * 1e6 for f in (row.ours, row.theirs))
        print(f"{row.name:40}{ours:8.2f}   {row.by_hand:28}{theirs:8.2f}{theirs / ours:16.2f}")
    print("PropsSI has no p,s nor p,h above the critical pressure in region 3.")
    _consistency(points, rng)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20_000)
