"""Water states: this package beside what a user would call by hand.

    python benchmarks/thermo.py [points]

Prints microseconds per state and the ratio, best of five, all in one run: compare the ratios, the
times are the machine's.
"""

from __future__ import annotations

import sys
import time
from typing import TYPE_CHECKING

import numpy as np
from CoolProp import CoolProp
from CoolProp.CoolProp import PropsSI

from monitor.thermo.water import saturated, saturation_temperature, state_ph, state_ps, state_pt

if TYPE_CHECKING:
    from collections.abc import Callable

REPEATS = 5


def _best(call: Callable[[], object]) -> float:
    times = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
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


def main(points: int) -> None:
    rng = np.random.default_rng(1)
    pressure = rng.uniform(1e5, 12e6, points)
    temperature = saturation_temperature(pressure) + rng.uniform(5.0, 300.0, points)
    steam = state_pt(pressure, temperature)
    low = pressure / 12.0
    expanded = state_ps(low, steam.entropy)
    high = pressure + 17e6
    live = state_pt(high, 873.15)
    # Warm up: the first p-h and p-s calls fit their estimates.
    for state in (state_ph(pressure, steam.enthalpy), state_ps(high, live.entropy)):
        assert state.valid.all()  # noqa: S101 - a benchmark of failed states measures nothing

    table = [
        (
            "p,T: h, s, v",
            lambda: state_pt(pressure, temperature),
            "bare fast_evaluate",
            _bare(pressure, temperature),
        ),
        (
            "p,s superheated: T, h, v, x",
            lambda: state_ps(pressure, steam.entropy),
            "PropsSI p,s: h alone",
            lambda: _props("Hmass", pressure, "Smass", steam.entropy),
        ),
        (
            f"p,s expanded, {np.mean(expanded.dryness < 1.0):.0%} wet: T, h, v, x",
            lambda: state_ps(low, steam.entropy),
            "PropsSI p,s: h alone",
            lambda: _props("Hmass", low, "Smass", steam.entropy),
        ),
        (
            "p,h superheated: T, s, v, x",
            lambda: state_ph(pressure, steam.enthalpy),
            "PropsSI p,h: s alone",
            lambda: _props("Smass", pressure, "Hmass", steam.enthalpy),
        ),
        (
            "p,s above 165 bar: T, h, v, x",
            lambda: state_ps(high, live.entropy),
            "PropsSI p,s: h alone",
            lambda: _props("Hmass", high, "Smass", live.entropy),
        ),
        (
            "saturated: h, s, v of both",
            lambda: saturated(low),
            "PropsSI p,x: h'' alone",
            lambda: _props("Hmass", low, "Q", np.ones_like(low)),
        ),
    ]
    print(f"{points} states, microseconds each")
    print(f"{'here':44}{'us':>8}   {'by hand':24}{'us':>8}{'by hand / here':>16}")
    for name, call, other_name, other in table:
        ours, theirs = (_best(f) / points * 1e6 for f in (call, other))
        print(f"{name:44}{ours:8.2f}   {other_name:24}{theirs:8.2f}{theirs / ours:16.1f}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20_000)
