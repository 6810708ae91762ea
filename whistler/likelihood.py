"""How far L and density may move before the points object: profile likelihood.

Far below the nose the good fits lie along a ridge of L and density that bends: sigma from the
curvature at its top is then too short on the one side and too long on the other. Along one unknown
at a time, the others fitted again at every step, the rise of the misfit says how far a side goes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fieldlines import FieldLineModel
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit
from whistler.problem import StrokeProblem, Ties

NINETY_FIVE = 1.96  # sigmas either side that hold 95 %
TEST_AT = 2.0  # sigmas off at which the misfit is held against the parabola
CURVED = 0.05  # departure of the root of its rise there, as a share, from which a ridge is curved
CLOSE = 0.005  # in sigmas: how closely the ends of an interval are found
MOST_STEPS = 12
SETTLED = 1e-4  # of the misfit's rise: when fitting the others again has come to its end
BEYOND = 4.0  # sigmas: no end of an interval is looked for farther out


@dataclass(frozen=True)
class Interval:
    """What the points allow of one number, as a logarithm.

    Parameters
    ----------
    sd : float
        One-sigma: half of what 68 % of probability take.
    low, high : float
        Ends of the interval of 95 %; NaN where there is no end before the limits of the fit.
    """

    sd: float
    low: float
    high: float


@dataclass(frozen=True)
class PathIntervals:
    """Intervals of one path.

    Parameters
    ----------
    log_l, log_density : Interval
        Of ln L and of ln density in m^-3.
    curved : bool
        Whether they are from the profile likelihood, not from the covariance.
    """

    log_l: Interval
    log_density: Interval
    curved: bool


def path_intervals(
    fit: StrokeFit, path: int, *, model: FieldLineModel, ties: Ties
) -> PathIntervals:
    """Return sigmas and 95 % intervals of L and density of one path of a fit.

    Parameters
    ----------
    fit : StrokeFit
        The fit.
    path : int
        Index of the path.
    model : fieldlines.FieldLineModel
        The model of the fit.
    ties : Ties
        The ties of the fit.

    Returns
    -------
    PathIntervals
        From the covariance where the misfit rises as the square of the distance, and where the
        model was fitted too; else from the rise itself, in the same units as the covariance.
    """
    unknowns = (2 * path, 2 * path + 1)
    if fit.open_sigmas.size:  # the model bends with L and density: the ridge is nearly straight
        best = (fit.log_l[path], fit.log_density[path])
        plain = [
            _plain(float(x), float(np.sqrt(fit.covariance[k, k])))
            for x, k in zip(best, unknowns, strict=True)
        ]
        return PathIntervals(plain[0], plain[1], curved=False)
    profile = _Profile(fit, model, ties)
    sd = {k: float(np.sqrt(fit.covariance[k, k])) for k in unknowns}
    curved = any(profile.departs(k, side * sd[k]) for k in unknowns for side in (-1.0, 1.0))
    make = profile.interval if curved else profile.plain_interval
    log_l, log_density = (make(k, sd[k]) for k in unknowns)
    return PathIntervals(log_l, log_density, curved)


def _plain(best: float, sd: float) -> Interval:
    return Interval(sd, best - NINETY_FIVE * sd, best + NINETY_FIVE * sd)


class _Profile:
    """The misfit along one unknown, all others fitted again."""

    def __init__(self, fit: StrokeFit, model: FieldLineModel, ties: Ties) -> None:
        self.problem = StrokeProblem(fit.used, ties, model, fit.lightning_time_s)
        self.low, self.high = self.problem.limits()
        start = np.zeros(self.problem.size)
        start[: self.problem.clock : 2] = fit.log_l
        start[1 : self.problem.clock : 2] = fit.log_density
        self.best, self.least = self._settle(start, np.arange(self.problem.size), MOST_STEPS)
        jacobian = self.problem.jacobian(self.best)
        self.spread = np.linalg.pinv(jacobian.T @ jacobian, rcond=1e-14, hermitian=True)
        # What the fit's sigmas are wider by, for few points and misfit, or narrower, without what
        # the stroke's place adds: the rise is counted in the same.
        used = np.arange(self.problem.clock)
        self.scale = fit.covariance[used, used] / self.spread[used, used]

    def rise(self, unknown: int, value: float, *, steps: int = MOST_STEPS) -> float:
        """Root of the rise of the misfit where an unknown has a value, in sigmas."""
        slope = self.spread[:, unknown] / self.spread[unknown, unknown]
        start = self.best + slope * (value - self.best[unknown])
        start = np.clip(start, self.low, self.high)
        others = np.delete(np.arange(len(start)), unknown)
        _, misfit = self._settle(start, others, steps)
        return float(np.sqrt(max(misfit - self.least, 0.0) / self.scale[unknown]))

    def departs(self, unknown: int, step: float) -> bool:
        """Whether the rise at twice a step of one sigma is not that of a parabola."""
        value = self.best[unknown] + TEST_AT * step
        return abs(self.rise(unknown, value, steps=1) - TEST_AT) > CURVED * TEST_AT

    def plain_interval(self, unknown: int, sd: float) -> Interval:
        """Sigma and 95 % interval that the covariance gives."""
        return _plain(float(self.best[unknown]), sd)

    def interval(self, unknown: int, sd: float) -> Interval:
        """Sigma and 95 % interval of one unknown."""
        ends = {
            (side, reach): self._end(unknown, side * sd, reach)
            for side in (-1, 1)
            for reach in (1.0, NINETY_FIVE)
        }
        return Interval(
            0.5 * (ends[1, 1.0] - ends[-1, 1.0]), ends[-1, NINETY_FIVE], ends[1, NINETY_FIVE]
        )

    def _end(self, unknown: int, step: float, reach: float) -> float:
        """Where the rise reaches so many sigmas; the rise is nearly straight, a secant is quick."""
        best = self.best[unknown]
        near, far = (0.0, 0.0), None
        distance = reach
        for _ in range(MOST_STEPS):
            value = best + distance * step
            if not self.low[unknown] < value < self.high[unknown]:
                return float("nan")
            rise = self.rise(unknown, value)
            if abs(rise - reach) < CLOSE:
                return float(value)
            if rise < reach:
                near = (distance, rise)
            else:
                far = (distance, rise)
            if far is None:
                distance = min(distance * min(reach / max(rise, 1e-3), 1.6), BEYOND * reach)
                if near[0] >= BEYOND * reach:
                    return float("nan")
            else:
                share = (reach - near[1]) / (far[1] - near[1])
                distance = near[0] + float(np.clip(share, 0.05, 0.95)) * (far[0] - near[0])
        return float(value)

    def _settle(
        self, x: FloatArray, free: NDArray[np.intp], steps: int
    ) -> tuple[FloatArray, float]:
        """Gauss-Newton over the free unknowns; the last step's gain is taken by the linear law."""
        x = np.clip(x, self.low, self.high)
        residual, jacobian = self.problem.evaluate(x)
        misfit = float(residual @ residual)
        for left in range(steps, 0, -1):
            step = np.linalg.lstsq(jacobian[:, free], -residual, rcond=1e-12)[0]
            linear = residual + jacobian[:, free] @ step
            expected = float(linear @ linear)
            if left == 1 or misfit - expected < SETTLED:
                return x, expected
            for _ in range(5):
                trial = x.copy()
                trial[free] += step
                trial = np.clip(trial, self.low, self.high)
                new_residual, new_jacobian = self.problem.evaluate(trial)
                new = float(new_residual @ new_residual)
                if new < misfit:
                    break
                step = 0.5 * step
            else:
                return x, misfit
            x, residual, jacobian, misfit = trial, new_residual, new_jacobian, new
        return x, misfit
