"""Shares, curves and rates with their intervals, for the campaign of the limits."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from promises import Figure
from scipy.stats import beta, chi2

CONFIDENCE = 0.95
RESAMPLES = 400
LEAST_CASES = 20  # of a bin of stated probabilities that is judged
STEPS = 60  # Newton steps; a dozen are enough where the curve is determined
# Two made-up injections of half a weight, missed far below and found far above all real ones, give
# samples without any miss a finite curve and move no other noticeably.
BEYOND_DB = 3.0
MADE_UP_WEIGHT = 0.5


@dataclass(frozen=True)
class Curve:
    """Share found as a logistic function of strength: half at `half_db`, width `width_db`."""

    half_db: float
    width_db: float

    def strength_db(self, share: float) -> float:
        """Strength at which this share is found."""
        return self.half_db + self.width_db * math.log(share / (1.0 - share))

    def share(self, strength_db: float) -> float:
        """Share found at a strength."""
        return 1.0 / (1.0 + math.exp(-(strength_db - self.half_db) / self.width_db))


def logistic(strength_db: np.ndarray, found: np.ndarray) -> Curve:
    """The most likely logistic curve through found or not against strength."""
    ends_db = [strength_db.min() - BEYOND_DB, strength_db.max() + BEYOND_DB]
    strength_db = np.concatenate((strength_db, ends_db))
    outcome = np.concatenate((np.asarray(found, dtype=float), [0.0, 1.0]))
    importance = np.ones(outcome.size)
    importance[-2:] = MADE_UP_WEIGHT
    middle = float(np.mean(strength_db))
    design = np.column_stack((np.ones(strength_db.size), strength_db - middle))
    coefficients = np.array([0.0, 0.5])
    for _ in range(STEPS):
        share = 1.0 / (1.0 + np.exp(-np.clip(design @ coefficients, -40.0, 40.0)))
        weight = importance * np.maximum(share * (1.0 - share), 1e-6)
        slope = design.T @ (importance * (outcome - share))
        step = np.linalg.solve(design.T @ (weight[:, None] * design), slope)
        coefficients += np.clip(step, -2.0, 2.0)
        if np.abs(step).max() < 1e-8:
            break
    return Curve(float(middle - coefficients[0] / coefficients[1]), float(1.0 / coefficients[1]))


def resampled(
    cluster: np.ndarray, statistic: Callable[[np.ndarray], Sequence[float]], *, seed: int = 1
) -> list[tuple[float, float]]:
    """95 % bootstrap intervals of statistics, drawing whole clusters (recordings) anew.

    `statistic` takes indices of the sample, with repetitions.
    """
    generator = np.random.default_rng(seed)
    members = [np.flatnonzero(cluster == one) for one in np.unique(cluster)]
    values = []
    for _ in range(RESAMPLES):
        drawn = generator.integers(len(members), size=len(members))
        values.append(statistic(np.concatenate([members[k] for k in drawn])))
    tail = 0.5 * (1.0 - CONFIDENCE)
    low, high = np.quantile(np.array(values), [tail, 1.0 - tail], axis=0)
    return [(float(a), float(b)) for a, b in zip(low, high, strict=True)]


def exact_interval(hits: int, count: int) -> tuple[float, float]:
    """95 % Clopper-Pearson interval of a share."""
    tail = 0.5 * (1.0 - CONFIDENCE)
    low = float(beta.ppf(tail, hits, count - hits + 1)) if hits else 0.0
    high = float(beta.ppf(1.0 - tail, hits + 1, count - hits)) if hits < count else 1.0
    return low, high


def share_figure(
    name: str, hits: Sequence[bool] | np.ndarray, *, low: float = -math.inf, high: float = math.inf
) -> Figure:
    """A share in per cent with its exact interval and how many it is of."""
    listed = np.asarray(hits, dtype=bool)
    count, right = listed.size, int(listed.sum())
    if count == 0:
        return Figure(f"{name} (of 0)", math.nan, low, high)
    ends = exact_interval(right, count)
    return Figure(
        f"{name} ({right} of {count})",
        100.0 * right / count,
        low,
        high,
        interval=(100.0 * ends[0], 100.0 * ends[1]),
    )


def hourly_figure(name: str, count: int, minutes: float, *, high: float = math.inf) -> Figure:
    """A number of events per hour with its exact Poisson interval."""
    hours = minutes / 60.0
    tail = 0.5 * (1.0 - CONFIDENCE)
    low = 0.5 * float(chi2.ppf(tail, 2 * count)) if count else 0.0
    top = 0.5 * float(chi2.ppf(1.0 - tail, 2 * count + 2))
    return Figure(
        f"{name} ({count} in {minutes:.0f} min)",
        count / hours,
        high=high,
        unit="per h",
        interval=(low / hours, top / hours),
    )


def least_hourly_figure(name: str, count: int, minutes: float, *, high: float) -> Figure:
    """The lower 95 % limit of events per hour, for parts of too few minutes to show a low rate.

    Minutes of audio cannot show a rate of one per hour; what they can show is that it is exceeded,
    and only then is the promise missed.
    """
    least = 0.5 * float(chi2.ppf(1.0 - CONFIDENCE, 2 * count)) if count else 0.0
    return Figure(
        f"{name}, lower 95 % limit ({count} in {minutes:.0f} min)",
        60.0 * least / minutes,
        high=high,
        unit="per h",
    )


def calibration_figure(
    name: str, edges: Sequence[float], stated: np.ndarray, right: np.ndarray, *, high: float
) -> Figure:
    """Largest difference, in points, of the mean stated probability and the share right in a bin.

    Bins of fewer than `LEAST_CASES` are left out. A bin whose mean stated lies within the exact
    interval of its share counts as no difference: chance alone makes ten points of twenty cases.
    """
    differences = []
    for _, _, inside in bins(edges, stated):
        count, hits = int(inside.sum()), int(right[inside].sum())
        if count >= LEAST_CASES:
            mean, ends = float(stated[inside].mean()), exact_interval(hits, count)
            outside = not ends[0] <= mean <= ends[1]
            differences.append(100.0 * abs(mean - hits / count) if outside else 0.0)
    title = f"{name}: largest difference of stated and right ({len(differences)} bins)"
    return Figure(title, max(differences, default=math.nan), high=high, unit="points")


def bins(edges: Sequence[float], values: np.ndarray) -> list[tuple[float, float, np.ndarray]]:
    """Bins from edge to edge with the mask of their values; the last one holds its upper edge."""
    last = len(edges) - 2
    return [
        (low, high, (values >= low) & ((values <= high) if k == last else (values < high)))
        for k, (low, high) in enumerate(pairwise(edges))
    ]
