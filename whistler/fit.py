"""L, equatorial density and lightning time from traces: one least-squares problem per stroke.

All paths of a stroke share its time; all hops of an echo train share its path. The sigmas that come
out are the statistical ones: noise, thickness and timing of the traces, given the model. What not
knowing the model adds is told apart in :mod:`whistler.uncertainty`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import OptimizeResult, least_squares

from fieldlines import FieldLineModel, travel_time
from fieldlines.errors import FloatArray
from whistler.problem import FREE, TIME_UNIT_S, PathTrace, StrokeProblem, Ties
from whistler.scatter import ModelScatter

ROBUST_SCALE = 3.0
TOLERANCE = 1e-7  # looser stops half-way along the ridge of L and density
OUTLIER_SIGMA = 4.5
SMALL_SAMPLE = 2.5  # a misfit known from few points is itself uncertain (as Student's t allows for)
LEAST_POINTS = 4  # that a trace must keep when outliers are dropped


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
        Statistical covariance of ln L, ln density (path by path) and lightning time in s: what the
        noise of the points does to them.
    rms_s : ndarray, shape (traces,)
        Root mean square of trace minus model.
    chi_square, freedom : float, int
        Misfit and degrees of freedom of the kept points.
    converged : bool
        Whether the solver met its tolerance; says nothing about uncertainty.
    at_bound : ndarray, shape (paths,), bool
        Whether L or density of a path ended on a limit.
    tie_misfit : float
        Largest residual of a tie, in sigmas.
    used : tuple of PathTrace
        The traces with only the points that were kept.
    model : fieldlines.FieldLineModel
        The model of the numbers: the default one, or what was fitted of it.
    open_sigmas : ndarray, shape (2,) or (0,)
        Fitted departures of what the model leaves open, in its declared one-sigmas.
    total_covariance : ndarray
        Covariance of ln L, ln density, time and these departures, with what the declared spreads of
        the model and of the stroke's place leave open; the statistical part of it is `covariance`.
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
    tie_misfit: float
    used: tuple[PathTrace, ...]
    model: FieldLineModel
    open_sigmas: FloatArray
    total_covariance: FloatArray

    @property
    def start(self) -> list[tuple[float, float]]:
        """L and density of each path, to start another fit from."""
        return [
            (float(np.exp(a)), float(np.exp(b)))
            for a, b in zip(self.log_l, self.log_density, strict=True)
        ]

    @property
    def whole_covariance(self) -> FloatArray:
        """Covariance as `covariance`, with what the declared spreads leave open."""
        own = len(self.covariance)
        return self.total_covariance[:own, :own]


def fit_stroke(
    traces: Sequence[PathTrace],
    *,
    start: Sequence[tuple[float, float]],
    lightning_time_s: float,
    model: FieldLineModel,
    ties: Ties = FREE,
    robust: bool = True,
    final: bool = True,
    scatter: ModelScatter | None = None,
    near: StrokeFit | None = None,
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
    robust : bool
        Whether to begin with a pass that outliers sway little, and then drop them; not needed for
        points that have been through it.
    final : bool
        Whether to finish with plain least squares; a robust pass alone is enough for a guess.
    scatter : ModelScatter, optional
        What of the model is to be fitted too, held near its default by its declared one-sigmas.
    near : StrokeFit, optional
        A fit whose departures from the model to start from.

    Returns
    -------
    StrokeFit
        With covariance scaled by the misfit where that exceeds the stated sigmas.
    """
    problem = StrokeProblem(traces, ties, model, lightning_time_s, scatter)
    low, high = problem.limits()
    x = np.zeros(problem.size)
    x[: problem.clock] = np.log(np.array(start)).ravel()
    if near is not None and len(near.open_sigmas) == problem.size - problem.open:
        x[problem.open :] = near.open_sigmas
    x = np.clip(x, low + 1e-6, high - 1e-6)
    limits = (low, high)
    found = None
    if robust:
        found = _solve(problem, x, limits, loss="soft_l1")
        x = found.x
    if found is None or final:
        if robust:
            _drop_outliers(problem, x)
        found = _solve(problem, x, limits, loss="linear")
    return _summary(problem, found.x, bool(found.success), low, high)


def _solve(
    problem: StrokeProblem,
    x: FloatArray,
    bounds: tuple[FloatArray, FloatArray],
    *,
    loss: str,
) -> OptimizeResult:
    return least_squares(
        problem.residual,
        x,
        problem.jacobian,
        bounds=bounds,
        method="dogbox",  # follows bent ridges in fewer steps than the trust region's ellipsoids
        loss=loss,
        f_scale=ROBUST_SCALE,
        x_scale="jac",
        ftol=TOLERANCE,
        xtol=TOLERANCE,
        gtol=TOLERANCE,
        max_nfev=60,
    )


def _drop_outliers(problem: StrokeProblem, x: FloatArray) -> None:
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
    problem: StrokeProblem,
    x: FloatArray,
    converged: bool,
    low: FloatArray,
    high: FloatArray,
) -> StrokeFit:
    residual, jacobian = problem.evaluate(x)
    points = sum(int(kept.sum()) for kept in problem.kept) + len(problem.traces)
    opened = problem.size - problem.open
    freedom = max(len(residual) - len(x), 1)
    chi_square = float(residual @ residual)
    scale = max(1.0, chi_square / freedom) * (1.0 + SMALL_SAMPLE / freedom)
    measured, noise = _shares(problem, len(residual), points)
    # A misfit widens what was measured, not the declared spreads. The fit weighed both as stated:
    # what noise does to it; what is known in the end weighs them as they turned out.
    wanted = [*range(problem.clock + 1), *range(problem.open, problem.size)]
    unit = np.ones(problem.size)
    unit[problem.clock] = TIME_UNIT_S
    gain = ((_inverse(jacobian) @ jacobian.T) * unit[:, None])[wanted]
    from_noise = (gain * (noise + (scale - 1.0) * measured)) @ gain.T
    widened = jacobian / np.sqrt(1.0 + (scale - 1.0) * measured)[:, None]
    total = (_inverse(widened) * np.outer(unit, unit))[np.ix_(wanted, wanted)]
    own = problem.clock + 1
    ties = np.abs(residual[points + opened :])
    near = np.minimum(x - low, high - x)[: problem.clock].reshape(-1, 2) < 1e-3
    return StrokeFit(
        log_l=x[0 : problem.clock : 2],
        log_density=x[1 : problem.clock : 2],
        lightning_time_s=problem.epoch_s + float(x[problem.clock]) * TIME_UNIT_S,
        covariance=from_noise[:own, :own],
        rms_s=problem.rms_s(x),
        chi_square=chi_square,
        freedom=freedom,
        converged=converged,
        at_bound=np.asarray(near.any(axis=1)),
        tie_misfit=float(ties.max()) if len(ties) else 0.0,
        used=problem.used(),
        model=problem.model_at(x),
        open_sigmas=x[problem.open :],
        total_covariance=total,
    )


def _inverse(jacobian: FloatArray) -> FloatArray:
    return np.asarray(np.linalg.pinv(jacobian.T @ jacobian, rcond=1e-14, hermitian=True))


def _shares(problem: StrokeProblem, count: int, points: int) -> tuple[FloatArray, FloatArray]:
    """How much of each residual's variance is measured, and how much counts as statistical.

    What pulls towards the default model and the stroke's place is neither: the statistical
    covariance takes them to be true. A density prior and a given L are statistical, not measured.
    """
    measured, ties = np.ones(count), problem.ties
    first_tie = points + problem.size - problem.open
    measured[points:first_tie] = 0.0
    declared = problem.paths * ((ties.l_value is not None) + (ties.density_prior_dex is not None))
    if ties.sferic is not None:
        reading = ties.sferic.sd_s**2
        measured[first_tie] = reading / (reading + ties.sferic.place_sd_s**2)
    noise = measured.copy()
    measured[count - declared :] = 0.0
    return measured, noise


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
