"""The rule by which rows belong to injected whistlers."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pytest

from whistler.recovery import Tally, distance_s, match, near


@dataclass(frozen=True)
class Curve:
    frequency_hz: np.ndarray
    time_s: np.ndarray


def curve(shift_s: float = 0.0, *, low_hz: float = 1000.0, high_hz: float = 8000.0) -> Curve:
    frequency_hz = np.linspace(low_hz, high_hz, 15)
    return Curve(frequency_hz, 1.0 + 60.0 / np.sqrt(frequency_hz) + shift_s)


def test_thirty_milliseconds_decide() -> None:
    assert match([curve()], [curve(0.029)]) == {0: 0}
    assert match([curve()], [curve(-0.031)]) == {}
    assert not near(curve(), [curve(0.061)])
    assert near(curve(), [curve(0.5), curve(0.059)])


def test_the_median_counts_over_points_inside_the_band() -> None:
    """Identity: outliers below half, and points beyond the band, do not move the distance."""
    points = curve(0.01)
    points.time_s[:6] += 3.0
    assert distance_s(points, curve()) == pytest.approx(0.01)
    wide = curve(0.01, low_hz=1000.0, high_hz=10_000.0)
    wide.time_s[wide.frequency_hz > 8000.0] += 3.0
    # the true curve is interpolated in straight lines between its 15 points
    assert distance_s(wide, curve()) == pytest.approx(0.01, abs=0.01)


def test_half_of_the_points_and_four_must_be_inside() -> None:
    assert math.isinf(distance_s(curve(low_hz=1000.0, high_hz=20_000.0), curve(high_hz=9000.0)))
    few = Curve(np.array([2000.0, 3000.0, 4000.0]), np.array([1.0, 1.0, 1.0]))
    assert math.isinf(distance_s(few, curve()))


def test_pairs_are_one_to_one_and_as_many_as_possible() -> None:
    """Two rows near one whistler: the nearer is its. Nearest-first would pair 20 with 0 ms and
    leave the other two alone."""
    assert match([curve()], [curve(0.020), curve(-0.001)]) == {0: 1}
    assert match([curve(0.0), curve(0.045)], [curve(0.020), curve(-0.025)]) == {0: 1, 1: 0}
    assert match([], [curve()]) == match([curve()], []) == {}


def test_tallies_add() -> None:
    total = Tally(live_s=1.0, rows=2) + Tally(live_s=3.0, extra_rows=1)
    assert total == Tally(live_s=4.0, rows=2, extra_rows=1)
