"""How strong a sum of power can be by chance: the law read off the reversed recording."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

NULL_WINDOW_S = 0.25
NULL_QUANTILES = (0.5, 0.95)


@dataclass(frozen=True)
class Null:
    """Law of the strongest chance sum in a short window, from the reversed recording.

    Sums of many cells are close to Gaussian, so the square of the strongest of many follows a
    Gumbel law; taking the law of the strongest itself would overstate what is rare.

    Parameters
    ----------
    location, scale : float
        Gumbel parameters of the squared sums, in squared sigmas.
    window_s : float
        Length of the window.
    strongest : float
        Largest sum of the reversed recording: risers, of which the bulk knows nothing.
    duration_s : float
        Length of the recording.
    """

    location: float
    scale: float
    window_s: float
    strongest: float
    duration_s: float

    def rate_per_hour(self, strength: float) -> float:
        """Expected chance sums of at least this strength in an hour."""
        exponent = -(max(strength, 0.0) ** 2 - self.location) / self.scale
        share = -np.expm1(-np.exp(min(exponent, 50.0)))
        seen = 3600.0 / self.duration_s if strength <= self.strongest else 0.0
        return float(max(3600.0 / self.window_s * share, seen))

    def threshold(self, rate_per_hour: float) -> float:
        """Strength exceeded by chance `rate_per_hour` times an hour."""
        share = min(rate_per_hour * self.window_s / 3600.0, 0.5)
        square = float(self.location - self.scale * np.log(-np.log1p(-share)))
        return max(float(np.sqrt(max(square, 0.0))), self.strongest)


def chance_law(best: NDArray[np.float32], *, frame_s: float) -> Null:
    """Law through two quantiles of the window maxima; outliers do not move it."""
    size = max(1, round(NULL_WINDOW_S / frame_s))
    count = max(len(best) // size, 1)
    maxima = best[: count * size].reshape(count, -1).max(axis=1)
    lower, upper = np.quantile(maxima, NULL_QUANTILES) ** 2
    # Gumbel quantile: location - scale ln(-ln q).
    place = -np.log(-np.log(NULL_QUANTILES))
    scale = max(float((upper - lower) / (place[1] - place[0])), 1.0)
    location = float(lower - scale * place[0])
    return Null(float(location), scale, size * frame_s, float(maxima.max()), len(best) * frame_s)
