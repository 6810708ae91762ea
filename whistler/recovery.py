"""What became of injected whistlers: rows matched with the truth, and everything counted.

Matching rule. A row may belong to a whistler when the median, over the row's own points inside the
whistler's band, of the distance in time from the whistler's true curve is at most 30 ms; at least
four points, and half of the row's, must lie inside the band. Pairs are one-to-one, as many as
possible, and among those the closest. The number of hops is no part of the rule.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from whistler.rows import WhistlerRow
from whistler.synthesis.truth import WhistlerTruth

MATCH_S = 0.030  # above any timing error (a few ms), below the distance of neighbouring paths
LEAST_POINTS = 4
MATCHING_RULE = (
    "one-to-one; median over the row's points inside the true band of |measured - true time| at "
    "most 30 ms; at least 4 points and half of the row's inside the band"
)


class Line(Protocol):
    """A curve in the plane of time and frequency: a true trace or a measured one."""

    @property
    def frequency_hz(self) -> NDArray[np.float64]:
        """Ascending frequencies, shape (n,)."""

    @property
    def time_s(self) -> NDArray[np.float64]:
        """Times there, shape (n,)."""


@dataclass(frozen=True)
class Injection:
    """A whistler put into a recording, and the row it gave.

    Parameters
    ----------
    recording : str
        The recording, as found.
    start_s : float
        Where the analysed piece begins, s from the recording's first sample.
    time : datetime or None
        UTC of the stroke.
    truth : WhistlerTruth
        What was put in; times from the beginning of the piece.
    diffuse : bool
        Whether it is of the thick kind.
    row : WhistlerRow or None
        What was found of it; times from the beginning of the piece.
    """

    recording: str
    start_s: float
    time: datetime | None
    truth: WhistlerTruth
    diffuse: bool
    row: WhistlerRow | None

    @property
    def found(self) -> bool:
        """Whether a row belongs to it."""
        return self.row is not None

    @property
    def time_error_s(self) -> float:
        """Median distance in time of the row's points from the truth, s; NaN when not found."""
        return float("nan") if self.row is None else distance_s(self.row.trace, self.truth.trace)


@dataclass(frozen=True)
class Tally:
    """What was seen besides the injected whistlers.

    Parameters
    ----------
    live_s : float
        Audio as it is that could be analysed, s.
    rows : int
        Rows found in it: the user's own whistlers, and any false ones.
    reversed_s : float
        Audio analysed backwards, s.
    false_rows : int
        Rows found in it.
    injected_s : float
        Audio with injected whistlers analysed, s; the same audio counts every time.
    extra_rows : int
        Rows in it that are neither injected nor in the audio as it is.
    rejected : int
        Whistlers not injected because a trace of the recording lies there, or silence.
    """

    live_s: float = 0.0
    rows: int = 0
    reversed_s: float = 0.0
    false_rows: int = 0
    injected_s: float = 0.0
    extra_rows: int = 0
    rejected: int = 0

    def __add__(self, other: Tally) -> Tally:
        """Return both together."""
        mine, its = vars(self), vars(other)
        return Tally(**{name: mine[name] + its[name] for name in mine})


def distance_s(points: Line, line: Line) -> float:
    """Return the median distance in time of points from a curve, s.

    Parameters
    ----------
    points : Line
        A measured trace.
    line : Line
        The curve, over its whole band.

    Returns
    -------
    float
        Infinite when fewer than four points, or than half of them, lie in the curve's band.
    """
    inside = (points.frequency_hz >= line.frequency_hz[0]) & (
        points.frequency_hz <= line.frequency_hz[-1]
    )
    if inside.sum() < max(LEAST_POINTS, 0.5 * inside.size):
        return float("inf")
    wanted_s = np.interp(points.frequency_hz[inside], line.frequency_hz, line.time_s)
    return float(np.median(np.abs(points.time_s[inside] - wanted_s)))


def match(lines: Sequence[Line], traces: Sequence[Line]) -> dict[int, int]:
    """Return which trace belongs to which curve, by the module's rule.

    Parameters
    ----------
    lines : sequence of Line
        True curves.
    traces : sequence of Line
        Measured traces.

    Returns
    -------
    dict of int to int
        Number of the trace for the number of each curve that has one.
    """
    from scipy.optimize import linear_sum_assignment

    if not lines or not traces:
        return {}
    table = np.array([[distance_s(trace, line) for trace in traces] for line in lines])
    allowed = table <= MATCH_S
    # A forbidden pair costs more than all allowed ones together could save.
    cost = np.where(allowed, table, 1.0 + MATCH_S * min(table.shape))
    pairs = zip(*linear_sum_assignment(cost), strict=True)
    return {int(i): int(j) for i, j in pairs if allowed[i, j]}


def near(line: Line, traces: Sequence[Line], *, within_s: float = 2.0 * MATCH_S) -> bool:
    """Return whether a curve runs so close to one of the traces that they could be confused."""
    return any(distance_s(trace, line) <= within_s for trace in traces)
