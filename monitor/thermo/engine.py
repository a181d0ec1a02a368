"""CoolProp's IF97 backend in batch: pressure and temperature in; h, s and v out.

In region 3 CoolProp gives a density to start from, and `region3` the rest.

This is the only file that talks to CoolProp. It takes CoolProp's compiled module alone, at the
first evaluation. An `AbstractState` is not shared between threads.
"""

from __future__ import annotations

import importlib
import sys
import threading
from functools import cache
from importlib.machinery import ExtensionFileLoader, PathFinder
from importlib.util import find_spec, module_from_spec
from typing import TYPE_CHECKING, Any

import numpy as np

from monitor.thermo import region3
from monitor.thermo.limits import (
    HIGHEST_TEMPERATURE,
    LOWEST_PRESSURE,
    REGION_5_PRESSURE,
    REGION_5_TEMPERATURE,
)

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import BoolArray, FloatArray

    StatusArray = npt.NDArray[np.int32]

__all__ = [
    "ENTHALPY",
    "ENTROPY",
    "VOLUME",
    "evaluate",
    "evaluate_column",
    "evaluate_off_saturation",
]

ENTHALPY, ENTROPY, VOLUME = 0, 1, 2
"""Columns of an evaluation [J/kg, J/(kg K), m3/kg]."""

_ON_SATURATION = 2  # the batch call's status for "within 3.3e-5 (relative) of p_sat"
_ALL = (ENTHALPY, ENTROPY, VOLUME)
_local = threading.local()
_loading = threading.Lock()


@cache
def _coolprop() -> Any:  # noqa: ANN401 - CoolProp ships no annotations
    """CoolProp's compiled module, without the package around it.

    The package names all its fluids when it is imported, which reads them all: two seconds and
    70 MB, in each process, that water by IF97 has no use for. Whoever imports the package before
    or after this shares the module.
    """
    name = "CoolProp.CoolProp"
    with _loading:
        package = None if name in sys.modules else find_spec("CoolProp")
        places = None if package is None else package.submodule_search_locations
        spec = None if places is None else PathFinder.find_spec(name, list(places))
        if spec is None or not isinstance(spec.loader, ExtensionFileLoader):
            return importlib.import_module(name)
        module = sys.modules[name] = module_from_spec(spec)
        spec.loader.exec_module(module)
        return module


def _state() -> Any:  # noqa: ANN401
    if not hasattr(_local, "state"):
        _local.state = _coolprop().AbstractState("IF97", "Water")
    return _local.state


@cache
def _outputs(columns: tuple[int, ...]) -> Any:  # noqa: ANN401
    coolprop = _coolprop()
    keys = (coolprop.iHmass, coolprop.iSmass, coolprop.iDmass)
    return np.array([keys[column] for column in columns], dtype=np.int32)


def evaluate(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    """Enthalpy, entropy and volume by the forward equations, right up to the saturation line.

    A point beside the saturation line gets the phase that IF97's own comparison with the line
    gives it. IAPWS R7-97(2012) regions 1, 2, 3 and 5.

    Args:
        pressure: [Pa], shape (n,).
        temperature: [K], shape (n,).

    Returns:
        Shape (n, 3): h [J/kg], s [J/(kg K)], v [m3/kg]; NaN outside the formulation.
    """
    # Imposing a phase only lifts the refusal beside the saturation line: measured, it changes no
    # value on either side of it nor in region 3.
    return _batch(pressure, temperature, _coolprop().iphase_gas, _ALL)[0]


def evaluate_column(pressure: FloatArray, temperature: FloatArray, column: int) -> FloatArray:
    """One column of `evaluate`, shape (n,), at less than half of its cost."""
    return _batch(pressure, temperature, _coolprop().iphase_gas, (column,))[0][:, 0]


def evaluate_off_saturation(
    pressure: FloatArray, temperature: FloatArray
) -> tuple[FloatArray, BoolArray]:
    """As `evaluate`, but a point on the saturation line is refused.

    Returns:
        The values as in `evaluate`, NaN on saturation; and the mask, shape (n,), of points on
        saturation: p within 3.3e-5 (relative) of p_sat(T), which is 0.5 to 2.7 mK of T.
    """
    values, status = _batch(pressure, temperature, _coolprop().iphase_not_imposed, _ALL)
    return values, status == _ON_SATURATION


def _batch(
    pressure: FloatArray, temperature: FloatArray, phase: int, columns: tuple[int, ...]
) -> tuple[FloatArray, StatusArray]:
    critical = region3.covers(pressure, temperature)
    if not critical.any():
        return _outside_region_3(pressure, temperature, phase, columns)
    values = np.empty((pressure.size, len(columns)))
    status = np.empty(pressure.size, dtype=np.int32)
    rest = ~critical
    values[rest], status[rest] = _outside_region_3(
        pressure[rest], temperature[rest], phase, columns
    )
    values[critical], status[critical] = _region_3(
        pressure[critical], temperature[critical], phase, columns
    )
    return values, status


def _outside_region_3(
    pressure: FloatArray, temperature: FloatArray, phase: int, columns: tuple[int, ...]
) -> tuple[FloatArray, StatusArray]:
    values, status = _call(pressure, temperature, phase, columns)
    hot = (temperature > HIGHEST_TEMPERATURE) & (temperature <= REGION_5_TEMPERATURE)
    if hot.any():
        hot &= (pressure >= LOWEST_PRESSURE) & (pressure <= REGION_5_PRESSURE)
        values[hot] = _region_5(pressure[hot], temperature[hot], columns)
    if columns[-1] == VOLUME:
        np.divide(1.0, values[:, -1], out=values[:, -1])
    return values, status


def _call(
    pressure: FloatArray, temperature: FloatArray, phase: int, columns: tuple[int, ...]
) -> tuple[FloatArray, StatusArray]:
    values = np.full((pressure.size, len(columns)), np.nan)
    status = np.zeros(pressure.size, dtype=np.int32)
    if pressure.size:
        _state().fast_evaluate(
            _coolprop().PT_INPUTS,
            np.ascontiguousarray(pressure),
            np.ascontiguousarray(temperature),
            _outputs(columns),
            values,
            status,
            phase,
        )
    return values, status


def _region_3(
    pressure: FloatArray, temperature: FloatArray, phase: int, columns: tuple[int, ...]
) -> tuple[FloatArray, StatusArray]:
    close, status = _call(pressure, temperature, phase, (VOLUME,))
    rho = region3.density(pressure, temperature, close[:, 0])
    rho[status == _ON_SATURATION] = np.nan
    at = region3.helmholtz(rho, temperature)
    wanted = {ENTHALPY: at.enthalpy, ENTROPY: at.entropy, VOLUME: 1.0 / rho}
    return np.column_stack([wanted[column] for column in columns]), status


def _region_5(
    pressure: FloatArray, temperature: FloatArray, columns: tuple[int, ...]
) -> FloatArray:
    # The batch call stops at 800 degC; PropsSI knows region 5. It marks a failure with inf.
    props = _coolprop().PropsSI
    values = np.full((pressure.size, len(columns)), np.nan)
    if pressure.size:
        for place, column in enumerate(columns):
            name = ("Hmass", "Smass", "Dmass")[column]
            values[:, place] = props(name, "P", pressure, "T", temperature, "IF97::Water")
        values[~np.isfinite(values).all(axis=1)] = np.nan
    return values
