"""L, equatorial density and lightning time from traces: one least-squares problem per stroke.

All paths of a stroke share its time; all hops of an echo train share its path. The unknowns are
ln L and ln density of each path and the lightning time in milliseconds, so that every one is of
order one. Two kinds of sigma come out: the statistical one (trace noise, thickness and timing, given
the model) and the profile one (what not knowing the density exponent, the ionosphere and the stroke's
position adds).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from fieldlines import (
    ChapmanLayer,
    FieldLineModel,
    saturated_density,
    travel_time,
    travel_time_jacobian,
)
from fieldlines.constants import EARTH_RADIUS_M, SPEED_OF_LIGHT_M_S
from whistler.errors import Notice, UsageError
from whistler.settings import Settings
from whistler.trace import Trace

TIME_UNIT_S = 1e-3
L_LIMITS = (1.25, 7.5)
DENSITY_LIMIT = 150.0  # factor either side of the climatology at L 3.2: room for five hops as one
ROBUST_SCALE = 3.0
OUTLIER_SIGMA = 4.5
UNDETERMINED_LOG_L = 0.10  # one-sigma of ln L beyond which an L is not worth printing
UNDETERMINED_LOG_DENSITY = 0.5


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
    """

    trace: Trace
    hops: int
    path: int


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

    log_l: NDArray[np.float64]
    log_density: NDArray[np.float64]
    lightning_time_s: float
    covariance: NDArray[np.float64]
    rms_s: NDArray[np.float64]
    chi_square: float
    freedom: int
    converged: bool
    at_bound: NDArray[np.bool_]

    @property
    def time_sd_s(self) -> float:
        """One-sigma of the lightning time."""
        return float(np.sqrt(self.covariance[-1, -1]))


def sferic_path_s(l_value: float | NDArray[np.float64]) -> float:
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


class _Problem:
    """Residuals and Jacobian of one stroke in scaled unknowns."""

    def __init__(
        self,
        traces: list[PathTrace],
        sferic: SfericTime | None,
        model: FieldLineModel,
        epoch_s: float,
    ) -> None:
        self.traces = traces
        self.sferic = sferic
        self.model = model
        self.epoch_s = epoch_s
        self.paths = 1 + max(item.path for item in traces)
        self.kept = [np.ones(len(item.trace.time_s), bool) for item in traces]

    def residual(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        return self._evaluate(x)[0]

    def jacobian(self, x: NDArray[np.float64]) -> NDArray[np.float64]:
        return self._evaluate(x)[1]

    def _evaluate(self, x: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        residuals, rows = [], []
        time_s = self.epoch_s + x[-1] * TIME_UNIT_S
        for item, kept in zip(self.traces, self.kept, strict=True):
            trace = item.trace
            l_value, density = np.exp(x[2 * item.path]), np.exp(x[2 * item.path + 1])
            delay = travel_time_jacobian(
                trace.frequency_hz[kept],
                l_value=float(l_value),
                equatorial_density_m3=float(density),
                model=self.model,
            )
            sd = trace.time_sd_s[kept]
            residuals.append((trace.time_s[kept] - time_s - item.hops * delay.time_s) / sd)
            row = np.zeros((len(sd), len(x)))
            row[:, 2 * item.path : 2 * item.path + 2] = (
                -item.hops * delay.jacobian[:, :2] / sd[:, None]
            )
            row[:, -1] = -TIME_UNIT_S / sd
            rows.append(row)
        if self.sferic is not None:
            value, slope = self._sferic_term(x, time_s)
            residuals.append(np.array([value]))
            rows.append(slope[None, :])
        return np.concatenate(residuals), np.concatenate(rows)

    def _sferic_term(
        self, x: NDArray[np.float64], time_s: float
    ) -> tuple[float, NDArray[np.float64]]:
        sferic = self.sferic
        slope = np.zeros(len(x))
        slope[-1] = -TIME_UNIT_S / sferic.sd_s  # type: ignore[union-attr]  # only called with one
        way_s = 0.0
        if sferic.odd_hops:  # type: ignore[union-attr]
            l_values = np.exp(x[0:-1:2])
            mean_l = float(l_values.mean())
            way_s = sferic_path_s(mean_l)
            by_l = EARTH_RADIUS_M / SPEED_OF_LIGHT_M_S / (mean_l * np.sqrt(mean_l - 1.0))
            slope[0:-1:2] = -by_l * l_values / len(l_values) / sferic.sd_s  # type: ignore[union-attr]
        return (sferic.time_s - way_s - time_s) / sferic.sd_s, slope  # type: ignore[union-attr]

    def limits(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        low = np.full(2 * self.paths + 1, -np.inf)
        high = np.full(2 * self.paths + 1, np.inf)
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
    traces: list[PathTrace],
    *,
    start: list[tuple[float, float]],
    lightning_time_s: float,
    model: FieldLineModel,
    sferic: SfericTime | None = None,
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
    sferic : SfericTime, optional
        Ties the time; without it the time is free.

    Returns
    -------
    StrokeFit
        With covariance scaled by the misfit where that exceeds the stated sigmas.
    """
    problem = _Problem(traces, sferic, model, lightning_time_s)
    low, high = problem.limits()
    x = np.append(np.log(np.array(start)).ravel(), 0.0)
    x = np.clip(x, low + 1e-6, high - 1e-6)
    rough = least_squares(
        problem.residual,
        x,
        problem.jacobian,
        bounds=(low, high),
        loss="soft_l1",
        f_scale=ROBUST_SCALE,
        x_scale="jac",
        max_nfev=60,
    )
    _drop_outliers(problem, rough.x)
    final = least_squares(
        problem.residual,
        rough.x,
        problem.jacobian,
        bounds=(low, high),
        x_scale="jac",
        max_nfev=60,
    )
    return _summary(problem, final.x, bool(final.success), low, high)


def _drop_outliers(problem: _Problem, x: NDArray[np.float64]) -> None:
    residual = problem.residual(x)
    at = 0
    for k, kept in enumerate(problem.kept):
        part = residual[at : at + kept.sum()]
        at += len(part)
        scale = max(1.0, float(np.median(np.abs(part))) / 0.6745)
        good = np.abs(part) <= OUTLIER_SIGMA * scale
        if good.sum() >= 4:
            problem.kept[k] = good


def _summary(
    problem: _Problem,
    x: NDArray[np.float64],
    converged: bool,
    low: NDArray[np.float64],
    high: NDArray[np.float64],
) -> StrokeFit:
    residual, jacobian = problem._evaluate(x)
    freedom = max(len(residual) - len(x), 1)
    chi_square = float(residual @ residual)
    normal = jacobian.T @ jacobian
    covariance = np.linalg.pinv(normal, rcond=1e-14, hermitian=True)
    covariance *= max(1.0, chi_square / freedom)
    unit = np.ones(len(x))
    unit[-1] = TIME_UNIT_S
    rms = []
    at = 0
    for item, kept in zip(problem.traces, problem.kept, strict=True):
        part = residual[at : at + kept.sum()] * item.trace.time_sd_s[kept]
        at += len(part)
        rms.append(float(np.sqrt(np.mean(part**2))))
    near = np.minimum(x - low, high - x)[:-1].reshape(-1, 2) < 1e-3
    return StrokeFit(
        log_l=x[0:-1:2],
        log_density=x[1:-1:2],
        lightning_time_s=problem.epoch_s + float(x[-1]) * TIME_UNIT_S,
        covariance=covariance * np.outer(unit, unit),
        rms_s=np.array(rms),
        chi_square=chi_square,
        freedom=freedom,
        converged=converged,
        at_bound=near.any(axis=1),
    )


def profile_covariance(
    fit: StrokeFit,
    traces: list[PathTrace],
    *,
    model: FieldLineModel,
    sferic: SfericTime | None,
    settings: Settings,
) -> NDArray[np.float64]:
    """Return the variance of ln L and ln density from what the model leaves open.

    Parameters
    ----------
    fit : StrokeFit
        The fit under the default model.
    traces : list of PathTrace
        What was fitted.
    model : fieldlines.FieldLineModel
        The default model.
    sferic : SfericTime or None
        The time tie, if one was used.
    settings : Settings
        Declared one-sigmas: density exponent, foF2, hmF2, stroke distance.

    Returns
    -------
    ndarray, shape (paths, 2)
        Variances of ln L and ln density: half the change of the fit between plus and minus one
        sigma of each source, squared and summed.
    """
    start = [(float(np.exp(a)), float(np.exp(b))) for a, b in zip(fit.log_l, fit.log_density, strict=True)]
    total = np.zeros((len(start), 2))
    for low, high in _model_pairs(model, sferic, settings):
        ends = [
            fit_stroke(
                traces,
                start=start,
                lightning_time_s=fit.lightning_time_s,
                model=varied,
                sferic=tie,
            )
            for varied, tie in (low, high)
        ]
        change = np.stack(
            [ends[1].log_l - ends[0].log_l, ends[1].log_density - ends[0].log_density], axis=1
        )
        total += (0.5 * change) ** 2
    return total


_Variant = tuple[FieldLineModel, SfericTime | None]


def _model_pairs(
    model: FieldLineModel, sferic: SfericTime | None, settings: Settings
) -> list[tuple[_Variant, _Variant]]:
    """The model one sigma below and above its default, source by source."""
    pairs: list[tuple[_Variant, _Variant]] = []
    exponents = [
        max(model.density_exponent + sign * settings.density_exponent_sd, 0.0) for sign in (-1, 1)
    ]
    low, high = (replace(model, density_exponent=value) for value in exponents)
    pairs.append(((low, sferic), (high, sferic)))
    if model.layer is not None:
        for name, spread in (
            ("critical_frequency_hz", settings.fo_f2_sd_mhz * 1e6),
            ("peak_altitude_m", settings.hm_f2_sd_km * 1e3),
        ):
            low, high = (replace(model, layer=_shifted(model.layer, name, sign * spread)) for sign in (-1, 1))
            pairs.append(((low, sferic), (high, sferic)))
    if sferic is not None:
        way_s = settings.stroke_distance_sd_m / SPEED_OF_LIGHT_M_S
        early, late = (replace(sferic, time_s=sferic.time_s + sign * way_s) for sign in (-1, 1))
        pairs.append(((model, early), (model, late)))
    return pairs


def _shifted(layer: ChapmanLayer, name: str, by: float) -> ChapmanLayer:
    return replace(layer, **{name: max(getattr(layer, name) + by, 1e5)})


def uncertainty_status(fit: StrokeFit, path: int) -> str:
    """Return ``ok``, ``at-bound`` or ``undetermined`` for one path of a fit."""
    if fit.at_bound[path]:
        return "at-bound"
    sd = np.sqrt(np.diag(fit.covariance)[2 * path : 2 * path + 2])
    if not np.isfinite(sd).all() or sd[0] > UNDETERMINED_LOG_L or sd[1] > UNDETERMINED_LOG_DENSITY:
        return "undetermined"
    return "ok"


def model_curve(
    frequency_hz: NDArray[np.float64],
    *,
    l_value: float,
    density_m3: float,
    hops: int,
    lightning_time_s: float,
    model: FieldLineModel,
) -> NDArray[np.float64]:
    """Return arrival times of a fitted path, s from the recording's first frame, shape (n,)."""
    return lightning_time_s + hops * travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )


def check_trace(name: str, trace: Trace) -> None:
    """Refuse a trace that no fit can use.

    Raises
    ------
    UsageError
        Fewer than three points, or frequencies and times that are not positive and finite.
    """
    usable = (
        np.isfinite(trace.frequency_hz).all()
        and np.isfinite(trace.time_s).all()
        and (trace.frequency_hz > 0).all()
        and (trace.time_sd_s > 0).all()
    )
    if len(trace.time_s) < 3 or not usable:
        reason = f"{len(trace.time_s)} usable points of positive frequency and sigma"
        raise UsageError(Notice("E604", name, reason, "give at least three points per trace"))
