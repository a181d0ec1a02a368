"""A baseline: what a condition figure is expected to be at a given load.

A robust straight line (or parabola, where it earns its keep) is fitted through the hours of a
reference period, in the manner of an MM-estimator (V. J. Yohai, Annals of Statistics 15, 642,
1987): repeated medians as a start that nearly half of the hours cannot spoil (A. F. Siegel,
Biometrika 69, 242, 1982), then Tukey's bisquare, which leaves hours that do not belong out
altogether. Huber's estimator is no start for this: with a quarter of the hours wrong to one side
it goes along with them.

The scale of the residuals is Qn (P. J. Rousseeuw, C. Croux, JASA 88, 1273, 1993), which needs less
than half as many hours as the median absolute deviation for the same certainty; control limits are
sensitive to it. Their lag-1 autocorrelation is the Qn estimate of Y. Ma and M. G. Genton (Journal
of Time Series Analysis 21, 663, 2000).
"""

from __future__ import annotations

import json
from dataclasses import dataclass, fields
from typing import Any, cast

import numpy as np
import numpy.typing as npt
import statsmodels.api as sm
from scipy.stats import norm, siegelslopes
from statsmodels.robust import norms
from statsmodels.robust.scale import qn_scale

__all__ = ["LARGEST_AUTOCORRELATION", "Baseline", "BaselineError", "fit_baseline"]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

HOUR = 3600
LARGEST_AUTOCORRELATION = 0.95
"""Residuals that hang together more than this are a trend, not noise with a memory."""

_LOAD_MARGIN = 0.10
"""How far beyond the reference loads a figure is still judged, as a share of their span."""
_LEAST_LOAD_MARGIN = 0.02
"""The same as a share of the load itself, for a reference period at one load."""
_CONSTANT_LOAD = 0.02
"""A middle-90 % span of loads under this share of the load cannot carry a slope."""
_CURVE_T = 3.0
"""The parabola stays only if its coefficient is this many standard errors from zero ..."""
_CURVE_GAIN = 0.95
"""... and the scale of the residuals falls to this share or less."""
_LEAST_PAIRS = 24
"""Adjacent hours needed for an autocorrelation."""
_ZERO = 1e-9
"""A spread under this share of the values is rounding."""
_MOST_SCALE_CORRECTION = 2.0
_MOST_STARTING_HOURS = 1000


class BaselineError(Exception):
    """A baseline cannot be fitted; the message says what was found and what to do."""


@dataclass(frozen=True)
class Baseline:
    """Expected value of a figure: intercept + linear x + quadratic x^2.

    Here x = (load - load_centre) / load_scale.

    Attributes:
        intercept, linear, quadratic: in the figure's unit; zero where a term is not used.
        load_centre, load_scale: of the regressor, in the load's unit; (0, 1) without one.
        load_low, load_high: loads between which a figure is judged, the margin included; None when
            the baseline does not ask for the load.
        covariance: of the three coefficients, row by row, autocorrelation allowed for.
        sigma: standard deviation of the residuals of single hours; zero for a figure that did not
            move in the reference period.
        phi: lag-1 autocorrelation of the residuals, 0 to `LARGEST_AUTOCORRELATION`.
        points: hours in the reference period that had a value.
        left_out: how many of these the fit gave no weight.
        start, end: the reference period, integer UTC seconds, half open.
        notes: sentences on what was not as usual.
    """

    intercept: float
    linear: float
    quadratic: float
    load_centre: float
    load_scale: float
    load_low: float | None
    load_high: float | None
    covariance: tuple[float, ...]
    sigma: float
    phi: float
    points: int
    left_out: int
    start: int
    end: int
    notes: tuple[str, ...] = ()

    def covers(self, load: npt.ArrayLike) -> npt.NDArray[np.bool_]:
        """Tell at which loads the figure is judged: within the reference loads, margin included."""
        loads = np.asarray(load, dtype=np.float64)
        if self.load_low is None or self.load_high is None:
            return np.ones(loads.shape, dtype=np.bool_)
        return np.asarray((loads >= self.load_low) & (loads <= self.load_high))

    def design(self, load: npt.ArrayLike) -> FloatArray:
        """Return the rows (1, x, x^2) of the regression, shape (..., 3)."""
        loads = np.asarray(load, dtype=np.float64)
        if self.load_low is None:
            loads = np.full_like(loads, self.load_centre)
        x = (loads - self.load_centre) / self.load_scale
        rows = np.stack([np.ones_like(x), x, x**2], axis=-1)
        return np.asarray(rows)

    def expected(self, load: npt.ArrayLike) -> FloatArray:
        """Return the expected value at each load; NaN where `covers` says it is not judged.

        Beyond the loads of the reference period a value would be a guess.
        """
        coefficients = np.array([self.intercept, self.linear, self.quadratic])
        return np.where(self.covers(load), self.design(load) @ coefficients, np.nan)

    def variance_of_mean(self, rows: FloatArray) -> FloatArray:
        """Return the variance of the expected value for (mean) design rows, figure's unit squared.

        The law of propagation (JCGM 100:2008, 5.2) for coefficients known to `covariance`.
        """
        matrix = np.array(self.covariance).reshape(3, 3)
        return np.asarray(np.einsum("...i,ij,...j->...", rows, matrix, rows))

    def to_json(self) -> str:
        """Write the baseline as one line of JSON; `from_json` gives exactly the same back."""
        return json.dumps({f.name: getattr(self, f.name) for f in fields(self)}, allow_nan=False)

    @classmethod
    def from_json(cls, text: str) -> Baseline:
        """Read what `to_json` wrote.

        Raises:
            BaselineError: the text is not a stored baseline.
        """
        try:
            found = json.loads(text)
            names = {f.name for f in fields(cls)}
            if not isinstance(found, dict) or set(found) != names:
                raise BaselineError(
                    "a stored baseline does not have the keys of this version; refit it"
                )
            found["covariance"] = tuple(float(value) for value in found["covariance"])
            found["notes"] = tuple(str(note) for note in found["notes"])
        except (ValueError, TypeError) as error:
            raise BaselineError(f"a stored baseline cannot be read ({error}); refit it") from error
        if len(found["covariance"]) != 9:  # noqa: PLR2004
            raise BaselineError("a stored baseline's covariance does not have 9 numbers; refit it")
        return cls(**found)


@dataclass(frozen=True)
class _Fit:
    """One robust fit in the figure's own unit."""

    coefficients: FloatArray
    covariance: FloatArray
    residuals: FloatArray
    kept: npt.NDArray[np.bool_]
    scale: float


def fit_baseline(
    value: npt.ArrayLike,
    load: npt.ArrayLike | None,
    hour: npt.ArrayLike,
    *,
    least_hours: int = 72,
    smallest_change: float = 0.0,
) -> Baseline:
    """Fit a figure's hourly values of a reference period on the load.

    Hours without a value, or without a load where one is asked for, are passed over. The order of
    the hours does not matter.

    Args:
        value: hourly values in the figure's unit, shape (n,).
        load: the equipment's load in each hour, shape (n,); None for a figure that does not follow
            the load (intercept only, judged at every load).
        hour: start of each hour, integer UTC seconds, shape (n,).
        least_hours: fewest usable hours.
        smallest_change: the smallest change worth a person's time, in the figure's unit. A figure
            that never moved has no statistical limit: it is accepted only if this is above zero.

    Raises:
        BaselineError: too few hours, or hours that do not vary at all.
    """
    values, loads, hours = _usable(value, load, hour)
    if values.size < max(least_hours, 2):
        raise BaselineError(
            f"{values.size} usable hours in the reference period, {least_hours} are needed; "
            "choose a longer period, or wait"
        )
    notes: list[str] = []
    if _is_still(values):
        return _still(values, loads, hours, smallest_change)
    centre, scale, terms = _regressor(loads)
    if loads is not None and terms == 1:
        notes.append("the load hardly varied in the reference period: judged near that load only")
    x = np.zeros(values.size) if loads is None else (loads - centre) / scale
    fit = _best_fit(values, x, terms)
    if fit.scale <= _ZERO * float(np.abs(values).max()):
        raise BaselineError(
            "more than half of the reference hours lie exactly on one curve of the load: this "
            "figure is calculated from the load, not measured; do not judge it"
        )
    phi, note = _autocorrelation(fit.residuals, fit.kept, hours)
    notes.extend(note)
    terms = fit.coefficients.size
    inflation = (1 + phi) / (1 - phi)
    # The fit takes up part of the noise, more so the longer the noise remembers.
    lost = 1 - terms * inflation / values.size
    sigma = fit.scale * min(1 / np.sqrt(max(lost, 1e-12)), _MOST_SCALE_CORRECTION)
    coefficients = np.zeros(3)
    coefficients[:terms] = fit.coefficients
    covariance = np.zeros((3, 3))
    covariance[:terms, :terms] = fit.covariance * inflation
    low, high = _load_range(loads, fit.kept)
    left_out = int(values.size - fit.kept.sum())
    if left_out > values.size // 4:
        notes.append(
            f"{left_out} of {values.size} reference hours do not fit the rest and have no weight"
        )
    return Baseline(
        intercept=float(coefficients[0]),
        linear=float(coefficients[1]),
        quadratic=float(coefficients[2]),
        load_centre=centre,
        load_scale=scale,
        load_low=low,
        load_high=high,
        covariance=tuple(float(c) for c in covariance.ravel()),
        sigma=float(sigma),
        phi=phi,
        points=int(values.size),
        left_out=left_out,
        start=int(hours[0]),
        end=int(hours[-1]) + HOUR,
        notes=tuple(notes),
    )


def _usable(
    value: npt.ArrayLike, load: npt.ArrayLike | None, hour: npt.ArrayLike
) -> tuple[FloatArray, FloatArray | None, IntArray]:
    values = np.asarray(value, dtype=np.float64)
    hours = np.asarray(hour, dtype=np.int64)
    loads = None if load is None else np.asarray(load, dtype=np.float64)
    if values.ndim != 1 or hours.shape != values.shape:
        raise BaselineError(f"{values.shape} values do not match {hours.shape} hours")
    if loads is not None and loads.shape != values.shape:
        raise BaselineError(f"{values.shape} values do not match {loads.shape} loads")
    usable = np.isfinite(values)
    if loads is not None:
        usable &= np.isfinite(loads)
    order = np.flatnonzero(usable)[np.argsort(hours[usable], kind="stable")]
    return values[order], None if loads is None else loads[order], hours[order]


def _is_still(values: FloatArray) -> bool:
    """Tell whether more than half of the values are the same but for rounding."""
    middle = np.median(values)
    spread = np.median(np.abs(values - middle))
    return bool(spread <= _ZERO * max(abs(middle), float(np.abs(values).max())))


def _still(
    values: FloatArray, loads: FloatArray | None, hours: IntArray, smallest_change: float
) -> Baseline:
    middle = float(np.median(values))
    if smallest_change <= 0:
        raise BaselineError(
            f"more than half of the reference hours have the same value {middle:.6g}: there is no "
            "spread to set a limit by (a stuck instrument?); give the figure a smallest_change, or "
            "choose another reference period"
        )
    kept = np.abs(values - middle) <= smallest_change
    low, high = _load_range(loads, kept)
    return Baseline(
        intercept=middle,
        linear=0.0,
        quadratic=0.0,
        load_centre=0.0,
        load_scale=1.0,
        load_low=low,
        load_high=high,
        covariance=(0.0,) * 9,
        sigma=0.0,
        phi=0.0,
        points=int(values.size),
        left_out=int(values.size - kept.sum()),
        start=int(hours[0]),
        end=int(hours[-1]) + HOUR,
        notes=(
            "the figure did not move in the reference period: its smallest change is the limit",
        ),
    )


def _regressor(loads: FloatArray | None) -> tuple[float, float, int]:
    """Centre and scale of the load, and how many terms it can carry (1: intercept only)."""
    if loads is None:
        return 0.0, 1.0, 1
    low, centre, high = (float(q) for q in np.quantile(loads, [0.05, 0.5, 0.95]))
    if high - low <= _CONSTANT_LOAD * abs(centre) or high == low:
        return 0.0, 1.0, 1
    # A parabola needs at least a handful of different loads, or it bends through two clusters.
    several = np.unique(np.round((loads - low) / (high - low) * 20)).size >= 6  # noqa: PLR2004
    return centre, (high - low) / 2, 3 if several else 2


def _load_range(
    loads: FloatArray | None, kept: npt.NDArray[np.bool_]
) -> tuple[float | None, float | None]:
    if loads is None:
        return None, None
    low, high = float(loads[kept].min()), float(loads[kept].max())
    margin = max(_LOAD_MARGIN * (high - low), _LEAST_LOAD_MARGIN * max(abs(low), abs(high)))
    return low - margin, high + margin


def _best_fit(values: FloatArray, x: FloatArray, terms: int) -> _Fit:
    rows = np.column_stack([np.ones_like(x), x, x**2])
    if terms < 3:  # noqa: PLR2004
        return _robust_fit(values, rows[:, :terms])
    line = _robust_fit(values, rows[:, :2])
    curve = _robust_fit(values, rows)
    error = float(np.sqrt(max(curve.covariance[2, 2], 0.0)))
    earns = abs(curve.coefficients[2]) > _CURVE_T * error
    return curve if earns and curve.scale <= _CURVE_GAIN * line.scale else line


def _robust_fit(values: FloatArray, rows: FloatArray) -> _Fit:
    """Repeated medians, then bisquares with the scale held: first the start's, then their own."""
    # The iteration stops on an absolute tolerance: standardised values make it the same everywhere.
    middle = float(np.median(values))
    spread = float(np.median(np.abs(values - middle)))
    scaled = (values - middle) / spread
    parameters = _start(scaled, rows)
    residuals = scaled - rows @ parameters
    kept = np.ones(scaled.size, dtype=np.bool_)
    covariance = np.zeros((rows.shape[1],) * 2)
    scale = float(np.median(np.abs(residuals))) / norm.ppf(0.75)
    for _ in range(2):
        if scale <= _ZERO:
            break
        model = sm.RLM(scaled, rows, M=norms.TukeyBiweight())
        fit = model.fit(maxiter=200, start_params=parameters, scale_est=_Held(scale))
        parameters = np.asarray(fit.params, dtype=np.float64)
        residuals = np.asarray(fit.resid, dtype=np.float64)
        kept = np.asarray(fit.weights) > 0
        covariance = np.asarray(fit.bcov_scaled, dtype=np.float64)
        scale = float(cast("Any", qn_scale)(residuals[kept]))
    coefficients = parameters * spread
    coefficients[0] += middle
    return _Fit(
        coefficients=coefficients,
        covariance=covariance * spread**2,
        residuals=residuals * spread,
        kept=kept,
        scale=scale * spread,
    )


def _start(values: FloatArray, rows: FloatArray) -> FloatArray:
    start = np.zeros(rows.shape[1])
    if start.size > 1:
        # Repeated medians take the square of the hours in memory; a thousand are plenty to start.
        some = np.unique(np.linspace(0, values.size - 1, _MOST_STARTING_HOURS).astype(np.int64))
        start[1] = siegelslopes(values[some], rows[some, 1]).slope
    start[0] = np.median(values - rows @ start)
    return start


@dataclass(frozen=True)
class _Held:
    """A scale that the iteration does not touch."""

    scale: float

    def __call__(self, model: object, residuals: FloatArray) -> float:
        del model, residuals
        return self.scale


def _qn(values: FloatArray) -> float:
    return float(cast("Any", qn_scale)(values))


def _autocorrelation(
    residuals: FloatArray, kept: npt.NDArray[np.bool_], hours: IntArray
) -> tuple[float, tuple[str, ...]]:
    """Lag-1 autocorrelation from neighbouring hours that both count, after Ma and Genton (2000)."""
    pair = (np.diff(hours) == HOUR) & kept[1:] & kept[:-1]
    pairs = int(pair.sum())
    if pairs < _LEAST_PAIRS:
        return 0.0, (f"only {pairs} pairs of neighbouring hours: autocorrelation taken as zero",)
    before, after = residuals[:-1][pair], residuals[1:][pair]
    together, apart = _qn(before + after) ** 2, _qn(after - before) ** 2
    phi = (together - apart) / (together + apart)
    # A fitted mean makes a short series look less correlated than it is: M. G. Kendall, Biometrika
    # 41, 403, 1954, to first order.
    phi += (1 + 3 * phi) / pairs
    return float(np.clip(phi, 0.0, LARGEST_AUTOCORRELATION)), ()
