"""L, equatorial density and lightning time from traces: one least-squares problem per stroke.

All paths of a stroke share its time; all hops of an echo train share its path. The unknowns are
ln L and ln density of each path and the lightning time in milliseconds, so that every one is of
order one. Two kinds of sigma come out: the statistical one (trace noise, thickness and timing, given
the model) and the profile one (what not knowing the density exponent, the ionosphere and the stroke's
position adds).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import OptimizeResult, least_squares

from fieldlines import (
    FieldLineModel,
    saturated_density,
    travel_time,
    travel_time_jacobian,
)
from fieldlines.constants import EARTH_RADIUS_M, SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.trace import Trace

TIME_UNIT_S = 1e-3
L_LIMITS = (1.25, 7.5)
DENSITY_LIMIT = 150.0  # factor either side of the climatology at L 3.2: room for five hops as one
ROBUST_SCALE = 3.0
OUTLIER_SIGMA = 4.5
SMALL_SAMPLE = 1.5  # a misfit known from few points is itself uncertain (as Student's t allows for)
LEAST_POINTS = 4  # that a trace must keep when outliers are dropped


@dataclass(frozen=True)
class PathTrace:
    """A trace with its place in a stroke.

    Parameters
    ----------
    trace : Trace
        The points.
    hops : int
        Field-line crossings.
    path : int
        Index of the path; hops of one echo train share it.
    centre_share_sd : float
        One-sigma, as a share of the travel time, of where the trace lies within its thickness.
    """

    trace: Trace
    hops: int
    path: int
    centre_share_sd: float = 0.0


@dataclass(frozen=True)
class SfericTime:
    """The causative sferic's arrival at the receiver.

    Parameters
    ----------
    time_s : float
        From the recording's first frame.
    sd_s : float
        One-sigma of reading it.
    odd_hops : bool
        Whether the stroke was in the conjugate hemisphere.
    """

    time_s: float
    sd_s: float
    odd_hops: bool


@dataclass(frozen=True)
class Ties:
    """What is known beside the traces; every tie adds one residual.

    Parameters
    ----------
    sferic : SfericTime, optional
        The causative sferic.
    lightning_time_s : tuple of float, optional
        Time of the lightning itself with its one-sigma, from the recording's first frame.
    l_value : float, optional
        L to hold every path at.
    density_prior_dex : float, optional
        One-sigma, in decades, of the density about the climatology at the fitted L.
    """

    sferic: SfericTime | None = None
    lightning_time_s: tuple[float, float] | None = None
    l_value: float | None = None
    density_prior_dex: float | None = None


FREE = Ties()
HELD = 1e-5  # one-sigma, in ln L, of an L that is given


@dataclass(frozen=True)
class StrokeFit:
    """Result of one joint fit.

    Parameters
    ----------
    log_l, log_density : ndarray, shape (paths,)
        ln L and ln of equatorial density in m^-3.
    lightning_time_s : float
        From the recording's first frame.
    covariance : ndarray, shape (2 paths + 1, 2 paths + 1)
        Statistical covariance of ln L, ln density (path by path) and lightning time in s.
    rms_s : ndarray, shape (traces,)
        Root mean square of trace minus model.
    chi_square, freedom : float, int
        Misfit and degrees of freedom of the kept points.
    converged : bool
        Whether the solver met its tolerance; says nothing about uncertainty.
    at_bound : ndarray, shape (paths,), bool
        Whether L or density of a path ended on a limit.
    """

    log_l: FloatArray
    log_density: FloatArray
    lightning_time_s: float
    covariance: FloatArray
    rms_s: FloatArray
    chi_square: float
    freedom: int
    converged: bool
    at_bound: NDArray[np.bool_]

    @property
    def start(self) -> list[tuple[float, float]]:
        """L and density of each path, to start another fit from."""
        return [
            (float(np.exp(a)), float(np.exp(b)))
            for a, b in zip(self.log_l, self.log_density, strict=True)
        ]

    @property
    def time_sd_s(self) -> float:
        """One-sigma of the lightning time."""
        return float(np.sqrt(self.covariance[-1, -1]))


def sferic_path_s(l_value: float | FloatArray) -> float:
    """Return the sferic's way from the conjugate foot to the receiver, s.

    Parameters
    ----------
    l_value : float or ndarray
        Field line; several are averaged first.

    Returns
    -------
    float
        ``2 Lambda RE / c`` with ``cos(Lambda)**2 = 1 / L``.

    Examples
    --------
    >>> f"{1e3 * sferic_path_s(2.2):.1f} ms"
    '35.3 ms'
    """
    mean_l = float(np.mean(l_value))
    return float(2.0 * np.arccos(mean_l**-0.5) * EARTH_RADIUS_M / SPEED_OF_LIGHT_M_S)


def _unit(size: int, at: int) -> FloatArray:
    vector = np.zeros(size)
    vector[at] = 1.0
    return vector


def _tie(misfit: float, by_x: FloatArray, sd: float) -> tuple[FloatArray, FloatArray]:
    return np.array([misfit / sd]), -by_x[None, :] / sd


def sferic_at(
    log_l: FloatArray, lightning_time_s: float, *, odd_hops: bool
) -> tuple[float, FloatArray]:
    """Return when the causative sferic reaches the receiver, and its derivatives.

    Parameters
    ----------
    log_l : ndarray, shape (paths,)
        ln L of the stroke's paths.
    lightning_time_s : float
        Time of the stroke.
    odd_hops : bool
        Whether it was in the conjugate hemisphere; else it was beside the receiver.

    Returns
    -------
    float
        Arrival, on the clock of `lightning_time_s`.
    ndarray, shape (2 paths + 1,)
        Derivatives with respect to ln L and ln density, path by path, and the time.
    """
    by_x = _unit(2 * len(log_l) + 1, -1)
    if not odd_hops:
        return lightning_time_s, by_x
    l_values = np.exp(log_l)
    mean_l = float(l_values.mean())
    by_l = EARTH_RADIUS_M / SPEED_OF_LIGHT_M_S / (mean_l * np.sqrt(mean_l - 1.0))
    by_x[0:-1:2] = by_l * l_values / len(l_values)
    return lightning_time_s + sferic_path_s(mean_l), by_x


class _Problem:
    """Residuals and Jacobian of one stroke in scaled unknowns."""

    def __init__(
        self, traces: Sequence[PathTrace], ties: Ties, model: FieldLineModel, epoch_s: float
    ) -> None:
        self.traces = traces
        self.ties = ties
        self.model = model
        self.epoch_s = epoch_s
        self.paths = 1 + max(item.path for item in traces)
        self.clock = 2 * self.paths  # place of the time among the unknowns; trace centres follow
        self.size = self.clock + 1 + len(traces)
        self.kept = [np.ones(len(item.trace.time_s), bool) for item in traces]
        self._last: tuple[FloatArray, FloatArray, FloatArray] | None = None

    def residual(self, x: FloatArray) -> FloatArray:
        return self.evaluate(x)[0]

    def jacobian(self, x: FloatArray) -> FloatArray:
        return self.evaluate(x)[1]

    def evaluate(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Residuals in sigmas and their derivatives; the solver asks for one after the other."""
        if self._last is None or not np.array_equal(self._last[0], x):
            self._last = (x.copy(), *self._evaluate(x))
        return self._last[1], self._last[2]

    def keep(self, kept: list[NDArray[np.bool_]]) -> None:
        """Use only these points of each trace from now on."""
        self.kept = kept
        self._last = None

    def _evaluate(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Traces first, then where each lies within its thickness, then ties."""
        time_s = self.epoch_s + x[self.clock] * TIME_UNIT_S
        parts = [self._trace_part(number, kept, x, time_s) for number, kept in enumerate(self.kept)]
        centres = np.arange(self.clock + 1, self.size)
        parts.append((x[centres], np.eye(self.size)[centres]))
        parts += self._tie_parts(x, time_s)
        return np.concatenate([part[0] for part in parts]), np.concatenate(
            [part[1] for part in parts]
        )

    def _trace_part(
        self, number: int, kept: NDArray[np.bool_], x: FloatArray, time_s: float
    ) -> tuple[FloatArray, FloatArray]:
        item = self.traces[number]
        trace, first, centre = item.trace, 2 * item.path, self.clock + 1 + number
        delay = travel_time_jacobian(
            trace.frequency_hz[kept],
            l_value=float(np.exp(x[first])),
            equatorial_density_m3=float(np.exp(x[first + 1])),
            model=self.model,
        )
        sd = trace.time_sd_s[kept]
        row = np.zeros((len(sd), len(x)))
        stretch = item.hops * (1.0 + item.centre_share_sd * x[centre])
        row[:, first : first + 2] = -stretch * delay.jacobian[:, :2] / sd[:, None]
        row[:, self.clock] = -TIME_UNIT_S / sd
        row[:, centre] = -item.hops * item.centre_share_sd * delay.time_s / sd
        return (trace.time_s[kept] - time_s - stretch * delay.time_s) / sd, row

    def _tie_parts(self, x: FloatArray, time_s: float) -> list[tuple[FloatArray, FloatArray]]:
        ties, parts = self.ties, []
        if ties.sferic is not None:
            predicted_s, slope = sferic_at(
                x[0 : self.clock : 2], time_s, odd_hops=ties.sferic.odd_hops
            )
            by_x = np.pad(slope, (0, self.size - len(slope)))
            by_x[self.clock] *= TIME_UNIT_S
            parts.append(_tie(ties.sferic.time_s - predicted_s, by_x, ties.sferic.sd_s))
        if ties.lightning_time_s is not None:
            wanted_s, sd_s = ties.lightning_time_s
            parts.append(_tie(wanted_s - time_s, TIME_UNIT_S * _unit(self.size, self.clock), sd_s))
        for path in range(self.paths):
            first = 2 * path
            if ties.l_value is not None:
                parts.append(_tie(np.log(ties.l_value) - x[first], _unit(self.size, first), HELD))
            if ties.density_prior_dex is not None:
                expected = np.log(saturated_density(np.exp(x[first])))
                # d ln n / d ln L of the climatology, over a step that its exponential law allows.
                step = np.log(saturated_density(1.001 * np.exp(x[first]))) - expected
                by_x = _unit(self.size, first + 1) - step / np.log(1.001) * _unit(self.size, first)
                sd = ties.density_prior_dex * np.log(10.0)
                parts.append(_tie(float(expected - x[first + 1]), by_x, sd))
        return parts

    def limits(self) -> tuple[FloatArray, FloatArray]:
        low = np.full(self.size, -np.inf)
        high = np.full(self.size, np.inf)
        for item in self.traces:
            top_hz = float(item.trace.frequency_hz.max())
            reach = float(self.model.dipole.l_from_equatorial_gyrofrequency(1.08 * top_hz))
            low[2 * item.path] = np.log(L_LIMITS[0])
            high[2 * item.path] = min(high[2 * item.path], np.log(min(L_LIMITS[1], reach)))
            middle = np.log(saturated_density(np.exp(0.5 * (np.log(2.0) + np.log(5.0)))))
            low[2 * item.path + 1] = middle - np.log(DENSITY_LIMIT)
            high[2 * item.path + 1] = middle + np.log(DENSITY_LIMIT)
        return low, high


def fit_stroke(
    traces: Sequence[PathTrace],
    *,
    start: Sequence[tuple[float, float]],
    lightning_time_s: float,
    model: FieldLineModel,
    ties: Ties = FREE,
    final: bool = True,
) -> StrokeFit:
    """Return L and density of every path of a stroke, and its time.

    Parameters
    ----------
    traces : list of PathTrace
        At least one trace of at least three points.
    start : list of tuple
        First guess (L, density in m^-3) for each path.
    lightning_time_s : float
        First guess, s from the recording's first frame.
    model : fieldlines.FieldLineModel
        Field, profile and ions.
    ties : Ties
        What else is known; by default the time is free.
    final : bool
        Whether to finish with outliers dropped; a robust pass alone is enough for a guess.

    Returns
    -------
    StrokeFit
        With covariance scaled by the misfit where that exceeds the stated sigmas.
    """
    problem = _Problem(traces, ties, model, lightning_time_s)
    low, high = problem.limits()
    x = np.append(np.log(np.array(start)).ravel(), np.zeros(1 + len(traces)))
    x = np.clip(x, low + 1e-6, high - 1e-6)
    found = _solve(problem, x, (low, high), loss="soft_l1", tolerance=1e-4)
    if final:
        _drop_outliers(problem, found.x)
        found = _solve(problem, found.x, (low, high), loss="linear", tolerance=1e-7)
    return _summary(problem, found.x, bool(found.success), low, high)


def _solve(
    problem: _Problem,
    x: FloatArray,
    bounds: tuple[FloatArray, FloatArray],
    *,
    loss: str,
    tolerance: float,
) -> OptimizeResult:
    return least_squares(
        problem.residual,
        x,
        problem.jacobian,
        bounds=bounds,
        loss=loss,
        f_scale=ROBUST_SCALE,
        x_scale="jac",
        ftol=tolerance,
        xtol=tolerance,
        gtol=tolerance,
        max_nfev=60,
    )


def _drop_outliers(problem: _Problem, x: FloatArray) -> None:
    residual = problem.residual(x)
    masks = []
    at = 0
    for kept in problem.kept:
        part = residual[at : at + kept.sum()]
        at += len(part)
        scale = max(1.0, float(np.median(np.abs(part))) / 0.6745)
        good = np.abs(part) <= OUTLIER_SIGMA * scale
        masks.append(good if good.sum() >= LEAST_POINTS else kept)
    problem.keep(masks)


def _summary(
    problem: _Problem,
    x: FloatArray,
    converged: bool,
    low: FloatArray,
    high: FloatArray,
) -> StrokeFit:
    residual, jacobian = problem.evaluate(x)
    used = problem.clock + 1
    freedom = max(len(residual) - len(x), 1)
    chi_square = float(residual @ residual)
    covariance = np.linalg.pinv(jacobian.T @ jacobian, rcond=1e-14, hermitian=True)[:used, :used]
    covariance *= max(1.0, chi_square / freedom) * (1.0 + SMALL_SAMPLE / freedom)
    unit = np.ones(used)
    unit[-1] = TIME_UNIT_S
    rms = []
    at = 0
    for item, kept in zip(problem.traces, problem.kept, strict=True):
        part = residual[at : at + kept.sum()] * item.trace.time_sd_s[kept]
        at += len(part)
        rms.append(float(np.sqrt(np.mean(part**2))))
    near = np.minimum(x - low, high - x)[: problem.clock].reshape(-1, 2) < 1e-3
    return StrokeFit(
        log_l=x[0 : problem.clock : 2],
        log_density=x[1 : problem.clock : 2],
        lightning_time_s=problem.epoch_s + float(x[problem.clock]) * TIME_UNIT_S,
        covariance=covariance * np.outer(unit, unit),
        rms_s=np.array(rms),
        chi_square=chi_square,
        freedom=freedom,
        converged=converged,
        at_bound=near.any(axis=1),
    )


def model_curve(
    frequency_hz: FloatArray,
    *,
    l_value: float,
    density_m3: float,
    hops: int,
    lightning_time_s: float,
    model: FieldLineModel,
) -> FloatArray:
    """Return arrival times of a fitted path, s from the recording's first frame, shape (n,)."""
    return lightning_time_s + hops * travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )
