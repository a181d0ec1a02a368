"""A line a stream: phase and region now, superheat or subcooling, and how far from an ideal gas."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.checking.lines import Figures, Line, Verdict, number
from monitor.flags import Flag, describe
from monitor.thermo.water import saturation_temperature, state_pt, state_px

if TYPE_CHECKING:
    from collections.abc import Iterator

    import numpy.typing as npt
    import pandas as pd

    from monitor.site.load import Site
    from monitor.store.batch import FigureBatch

__all__ = ["stream_lines"]

HOUR = 3600
_SHOWN = ("mass_flow_kg_s", "pressure_bar", "temperature_degc", "dryness")
_GAS_CONSTANT = 461.526
"""[J/(kg K)] of water, IAPWS R7-97(2012), table 1."""
_LEAST_Z, _MOST_Z = 0.6, 1.02
"""Compressibility of steam in a plant below 200 bar: outside, p or T is in doubt."""
_MISSING_LOOK, _HALF = 0.15, 0.5
_AT_SATURATION = 0.01


def stream_lines(site: Site, batch: FigureBatch) -> Iterator[Line]:
    """Tell of every stream: means of the newest hour, faults of the whole day."""
    newest = batch.streams[batch.streams["time"] >= batch.end - HOUR]
    days = {
        str(k): v["flag"].to_numpy(dtype=np.int64)
        for k, v in batch.streams.groupby("subject", sort=False)
    }
    for stream_id, cells in newest.groupby("subject", sort=False):
        stream = site.streams[str(stream_id)]
        means = cells.drop(columns=["subject", "time", "flag"]).mean()
        flags = cells["flag"].to_numpy(dtype=np.int64)
        figures: Figures = {name: number(means[name]) for name in (*_SHOWN, "exergy_live_kw")}
        figures["flags"] = describe(_all(flags))
        band = site.file.site.saturation_band
        verdict, reason = _judge(days[str(stream_id)], band)
        if stream.medium == "water":
            superheat = _superheat(means["pressure_bar"], means["temperature_degc"])
            z = _compressibility(means, superheat)
            figures["superheat_k"] = number(superheat)
            figures["compressibility"] = number(z)
            found = _words(means, superheat, z)
            if reason == _unfixed(band) and abs(superheat) > 2 * band:
                reason = "its flow or state is found from a stream that is near saturation"
            if verdict == "ok" and (z < _LEAST_Z or z > _MOST_Z):
                verdict, reason = "look", _far_from_ideal(z)
        else:
            found = f"{means['energy_kw']:.4g} kW of {stream.medium}"
        yield Line("stream", stream.id, verdict, found, reason, figures)


def _superheat(bar: float, degc: float) -> float:
    return float(degc + 273.15 - saturation_temperature(bar * 1e5))


def _compressibility(means: pd.Series[float], superheat: float) -> float:
    """Z = p v / (R T) of steam: near one for a gas; NaN for water and for a wet mixture."""
    bar, kelvin, dryness = (
        means["pressure_bar"],
        means["temperature_degc"] + 273.15,
        means["dryness"],
    )
    if not np.isfinite(superheat) or not dryness >= 1.0 or superheat < -_AT_SATURATION:
        return float("nan")
    p = np.array([bar * 1e5])
    state = state_px(p, 1.0) if superheat < _AT_SATURATION else state_pt(p, np.array([kelvin]))
    return float(p[0] * state.volume[0] / (_GAS_CONSTANT * kelvin))


def _far_from_ideal(z: float) -> str:
    return f"pv/RT is {z:.2f}; steam in a plant lies between {_LEAST_Z} and 1: look at its p and T"


def _words(means: pd.Series[float], superheat: float, z: float) -> str:
    flow = f"{3.6 * means['mass_flow_kg_s']:.4g} t/h"
    state = f"{means['pressure_bar']:.4g} bar(a), {means['temperature_degc']:.4g} degC"
    gas = f", Z = {z:.3f}" if np.isfinite(z) else ""
    dryness = means["dryness"]
    if 0 < dryness < 1:
        return f"{flow}, {state}, wet, x = {dryness:.3f}"
    if not np.isfinite(superheat):
        return f"{flow}, {state}"
    if abs(superheat) < _AT_SATURATION:
        return f"{flow}, {state}, saturated {'steam' if dryness > _HALF else 'liquid'}{gas}"
    word = (
        f"superheated {superheat:.1f} K"
        if superheat > 0
        else f"liquid, {-superheat:.1f} K from boiling"
    )
    return f"{flow}, {state}, {word}{gas}"


def _judge(flags: npt.NDArray[np.int64], band: float) -> tuple[Verdict, str]:
    def share(bit: Flag) -> float:
        return float(((flags & bit) != 0).mean())

    missing = share(Flag.MISSING)
    if share(Flag.OUT_OF_REGION) > _HALF:
        return "wrong", "its pressure and temperature are outside the steam tables; check units"
    if missing > _HALF:
        return "wrong", "its state or flow is missing for most of the day"
    if share(Flag.NEAR_SATURATION) > _MISSING_LOOK:
        return "look", _unfixed(band)
    if share(Flag.SIDE_ASSUMED | Flag.UNCERTAIN) > _HALF and share(Flag.SIDE_ASSUMED) > _HALF:
        return "look", "p and T tell another phase than the site file states"
    if missing > _MISSING_LOOK:
        return "look", f"its state or flow is missing for {100 * missing:.0f} % of the day"
    return "ok", ""


def _unfixed(band: float) -> str:
    return (
        f"within {band:g} K of saturation p and T do not fix the state; add dryness, phase, or "
        "enthalpy = 'balance'"
    )


def _all(flags: npt.NDArray[np.int64]) -> int:
    return int(np.bitwise_or.reduce(flags)) if flags.size else 0
