"""Shares with their uncertainty: binomial and Poisson intervals, and where a share is reached."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

CONFIDENCE = 0.95
STRENGTH_STEP_DB = 0.25  # strengths are rounded to this for the curve of shares
PLACES = 121
BEYOND_DB = 6.0  # how far outside the strengths tried the middle of the curve may lie
WIDTHS_DB = (0.1, 4.0)  # of the logistic curve; it climbs from 12 to 88 % within four of them
WIDTH_COUNT = 16
TOP_COUNT = 40  # largest shares tried, up to 1
ACCIDENT = 1e-6  # no share is taken for exactly 0 or 1


@dataclass(frozen=True)
class Interval:
    """An interval of 95 % confidence.

    Parameters
    ----------
    low, high : float
        Its ends; NaN where nothing limits it.
    """

    low: float
    high: float


@dataclass(frozen=True)
class Share:
    """How many of those in a range were hits.

    Parameters
    ----------
    low, high : float
        The range, in the unit of what is sorted into bins.
    tried, hits : int
        Number of all and of hits.
    """

    low: float
    high: float
    tried: int
    hits: int

    @property
    def share(self) -> float:
        """Hits over all; NaN when there are none."""
        return self.hits / self.tried if self.tried else float("nan")

    @property
    def interval(self) -> Interval:
        """Binomial interval of the share."""
        return binomial_interval(self.hits, self.tried)


@dataclass(frozen=True)
class Crossing:
    """The strength at which a share is reached.

    Parameters
    ----------
    share : float
        The share.
    strength_db : float
        Median of what the hits allow, dB; NaN outside the strengths tried.
    interval_db : Interval
        95 % interval, dB; an end outside the strengths tried is NaN.
    reached : {"below", "within", "above"} or None
        Where that is, against the strengths tried; None when they are too few to tell.
    """

    share: float
    strength_db: float
    interval_db: Interval
    reached: str | None


def binomial_interval(hits: int, tried: int) -> Interval:
    """Return the exact (Clopper-Pearson) 95 % interval of a share.

    Parameters
    ----------
    hits, tried : int
        Number of hits, and of all.

    Returns
    -------
    Interval
        0 to 1 when nothing was tried.

    Notes
    -----
    The ends are quantiles of beta distributions (Clopper and Pearson 1934).

    Examples
    --------
    >>> found = binomial_interval(10, 10)
    >>> f"{found.low:.3f} to {found.high:.0f}"  # the lower end is 0.025 ** 0.1
    '0.692 to 1'
    """
    from scipy import stats

    tail = 0.5 * (1.0 - CONFIDENCE)
    low = float(stats.beta.ppf(tail, hits, tried - hits + 1)) if hits > 0 else 0.0
    high = float(stats.beta.ppf(1.0 - tail, hits + 1, tried - hits)) if hits < tried else 1.0
    return Interval(low, high)


def poisson_interval(count: int) -> Interval:
    """Return the exact 95 % interval of the mean of a Poisson count.

    Parameters
    ----------
    count : int
        Events seen.

    Returns
    -------
    Interval
        From 0 when none was seen.

    Notes
    -----
    The ends are quantiles of chi-square distributions (Garwood 1936).

    Examples
    --------
    >>> f"{poisson_interval(0).high:.2f}"  # -ln 0.025
    '3.69'
    """
    from scipy import stats

    tail = 0.5 * (1.0 - CONFIDENCE)
    low = 0.5 * float(stats.chi2.ppf(tail, 2 * count)) if count > 0 else 0.0
    return Interval(low, 0.5 * float(stats.chi2.ppf(1.0 - tail, 2 * count + 2)))


def binned(
    values: Sequence[float] | NDArray[np.float64],
    hits: Sequence[bool] | NDArray[np.bool_],
    *,
    edges: Sequence[float] | NDArray[np.float64],
) -> tuple[Share, ...]:
    """Return the share of hits in every bin.

    Parameters
    ----------
    values, hits : sequence, shape (n,)
        What is sorted into bins, and whether it was a hit.
    edges : sequence, shape (m + 1,)
        Ascending; the last bin contains its upper edge.

    Returns
    -------
    tuple of Share
        One for each bin, empty ones too.

    Examples
    --------
    >>> [bin.hits for bin in binned([1.0, 1.5, 3.0], [True, False, True], edges=[1, 2, 3])]
    [1, 1]
    """
    tried, _ = np.histogram(values, edges)
    found, _ = np.histogram(np.asarray(values)[np.asarray(hits, bool)], edges)
    return tuple(
        Share(float(low), float(high), int(n), int(k))
        for low, high, n, k in zip(edges[:-1], edges[1:], tried, found, strict=True)
    )


def strength_at(
    share: float,
    *,
    strength_db: Sequence[float] | NDArray[np.float64],
    hits: Sequence[bool] | NDArray[np.bool_],
    range_db: tuple[float, float] | None = None,
) -> Crossing:
    r"""Return the strength at which a share of whistlers is found, with what is known of it.

    Parameters
    ----------
    share : float
        The share asked for, between 0 and 1.
    strength_db : sequence, shape (n,)
        Strengths tried, dB.
    hits : sequence of bool, shape (n,)
        Whether each was found.
    range_db : tuple of float, optional
        The range they were drawn from; by default the least and the largest of them.

    Returns
    -------
    Crossing
        NaN outside that range; `reached` tells on which side. An interval that covers the whole
        range tells nothing: everything is NaN, and `reached` None.

    Notes
    -----
    The share is taken to climb as a logistic curve to a largest share that may be less than 1,

    .. math:: p(s) = \frac{a}{1 + e^{-(s - s_0)/w}},

    and all curves on a grid of :math:`(s_0, \ln w, a)` are weighed by their binomial likelihood.
    Median and interval are those of the strength at which the weighed curves pass the share;
    curves with :math:`a` below it never do. No random numbers are involved.
    """
    strengths = np.asarray(strength_db, float)
    unknown = Crossing(share, np.nan, Interval(np.nan, np.nan), None)
    if not strengths.size:
        return unknown
    least, most = range_db or (float(strengths.min()), float(strengths.max()))
    at, weight = _weighed_crossings(
        share, strengths, hits=np.asarray(hits, bool), range_db=(least, most)
    )
    order = np.argsort(at, kind="stable")
    total = np.cumsum(weight[order])
    tail = 0.5 * (1.0 - CONFIDENCE)
    places = np.searchsorted(total, np.array([tail, 0.5, 1.0 - tail]) * total[-1])
    quantiles = at[order][np.minimum(places, at.size - 1)]
    below, above = quantiles < least, quantiles > most
    if below[0] and above[-1]:
        return unknown
    low, middle, high = (float(value) for value in np.where(below | above, np.nan, quantiles))
    reached = "below" if below[1] else "above" if above[1] else "within"
    return Crossing(share, middle, Interval(low, high), reached)


def _weighed_crossings(
    share: float,
    strengths: NDArray[np.float64],
    *,
    hits: NDArray[np.bool_],
    range_db: tuple[float, float],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Strength at which every curve of the grid passes the share, and the curve's weight."""
    from scipy.special import expit

    steps = np.rint(strengths / STRENGTH_STEP_DB)
    levels, which = np.unique(steps, return_inverse=True)
    tried = np.bincount(which)
    found = np.bincount(which, weights=hits)
    place = np.linspace(range_db[0] - BEYOND_DB, range_db[1] + BEYOND_DB, PLACES)
    width = np.geomspace(*WIDTHS_DB, WIDTH_COUNT)
    tops = np.arange(1, TOP_COUNT + 1) / TOP_COUNT
    rise = expit((levels * STRENGTH_STEP_DB - place[:, None, None]) / width[:, None])
    crossings, scores = [], []
    for top in tops:
        chance = np.clip(top * rise, ACCIDENT, 1.0 - ACCIDENT)
        scores.append(np.log(chance) @ found + np.log1p(-chance) @ (tried - found))
        odds = share / (top - share) if top > share else np.inf
        crossings.append(place[:, None] + width * np.log(odds))
    score = np.array(scores).ravel()
    return np.array(crossings).ravel(), np.exp(score - score.max())


@dataclass(frozen=True)
class ShareCurves:
    """Shares found, as they are drawn.

    Parameters
    ----------
    thin, diffuse : tuple of Share
        By strength, dB, for each kind of trace.
    thin_crossings, diffuse_crossings : tuple of Crossing
        Where half and nine tenths of each kind are found.
    by_l : tuple of Share
        By L, over all strengths and both kinds.
    by_hour : tuple of Share
        By hour of the day, UTC, likewise; empty when no recording's time is known.
    """

    thin: tuple[Share, ...]
    diffuse: tuple[Share, ...]
    thin_crossings: tuple[Crossing, ...]
    diffuse_crossings: tuple[Crossing, ...]
    by_l: tuple[Share, ...]
    by_hour: tuple[Share, ...]
