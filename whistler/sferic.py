"""Sferics: the catalogue kept while blanking, and which of them caused a whistler."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from fieldlines.constants import SPEED_OF_LIGHT_M_S

MARK_SIGMA = 4.0
LOCAL_S = 0.012  # a sferic is over within it; a whistler, at any frequency, is not
GUARD_S = 0.001
FRONT_SHARE = 0.1  # of the peak: what is weaker ahead of it is ringing of the zero-phase filters


@dataclass(frozen=True)
class SfericCatalogue:
    """Sferics of one stretch of audio, in time order.

    Parameters
    ----------
    time_s : ndarray, shape (k,)
        Arrival of the front, from the recording's first frame.
    amplitude : ndarray, shape (k,)
        Peak in robust sigmas of the whitened audio.
    duration_s : float
        Length of audio searched.
    front_hz : float
        Frequency that leads a front: the top of the analysed band.
    """

    time_s: NDArray[np.float64]
    amplitude: NDArray[np.float64]
    duration_s: float
    front_hz: float = 11_000.0

    @property
    def rate_hz(self) -> float:
        """Sferics per second."""
        return len(self.time_s) / self.duration_s if self.duration_s > 0 else 0.0

    def shifted(self, by_s: float) -> SfericCatalogue:
        """Return the same sferics on a clock `by_s` later."""
        return SfericCatalogue(self.time_s + by_s, self.amplitude, self.duration_s, self.front_hz)


def catalogue_sferics(
    whitened: NDArray[np.float32], *, sample_rate_hz: float, front_hz: float = 11_000.0
) -> tuple[SfericCatalogue, NDArray[np.bool_]]:
    """Return the sferics in whitened audio and the samples they spoil.

    Parameters
    ----------
    whitened : ndarray, shape (n,), float32
        Audio of unit robust variance.
    sample_rate_hz : float
        Its rate.
    front_hz : float
        Top of the analysed band, with its skirt.

    Returns
    -------
    SfericCatalogue
        Times from the first sample.
    ndarray, shape (n,), bool
        True where a sferic or its 1 ms guard spoils the sample.
    """
    strength = np.abs(whitened)
    loud = strength > MARK_SIGMA * _local_sigma(strength, sample_rate_hz)
    guard = max(1, round(GUARD_S * sample_rate_hz))
    marked = np.asarray(ndimage.maximum_filter1d(loud, 2 * guard + 1))
    starts = np.flatnonzero(np.diff(marked.astype(np.int8), prepend=0) == 1)
    stops = np.flatnonzero(np.diff(marked.astype(np.int8), append=0) == -1) + 1
    parts = [strength[a:b] * loud[a:b] for a, b in zip(starts, stops, strict=True)]
    amplitude = np.array([part.max() for part in parts])
    lead = [int(np.argmax(part > FRONT_SHARE * part.max())) for part in parts]
    time_s = (starts + np.array(lead, int)) / sample_rate_hz
    catalogue = SfericCatalogue(time_s, amplitude, len(whitened) / sample_rate_hz, front_hz)
    return catalogue, marked


def _local_sigma(strength: NDArray[np.float32], sample_rate_hz: float) -> NDArray[np.float32]:
    """Robust sigma of the surroundings, at least one: raised by a whistler, not by a sferic."""
    size = max(1, round(LOCAL_S * sample_rate_hz))
    count = -(-len(strength) // size)
    padded = np.pad(strength, (0, count * size - len(strength)), mode="edge")
    sigma = np.median(padded.reshape(count, size), axis=1) / 0.6745
    sigma = np.maximum(ndimage.uniform_filter1d(sigma, 3, mode="nearest"), 1.0)
    return np.repeat(sigma, size)[: len(strength)].astype(np.float32)


CAUSE_UNSEEN = 0.25  # prior share of causative sferics too weak to be catalogued (our own estimate)
CAUSE_STRONGER = 0.7  # in ln amplitude: strokes that make whistlers are the strong ones
READING_SD_S = 0.0005  # of a front on the whitened audio


GUIDE_HEIGHT_M = 85e3  # at night (published tweek heights: 80-91 km)


def front_lag_s(path_s: float, *, front_hz: float) -> float:
    r"""Return how late a catalogued front is behind a signal at the speed of light.

    Parameters
    ----------
    path_s : float
        Way through the Earth-ionosphere waveguide at the speed of light, s.
    front_hz : float
        Frequency that leads, above the cutoff.

    Returns
    -------
    float
        Lag of the first mode at the frequency that leads.

    Notes
    -----
    .. math:: \Delta t = t \left[(1 - (f_c / f)^2)^{-1/2} - 1\right], \quad f_c = c / 2h

    for a flat guide with a sharp boundary (from first principles).

    Examples
    --------
    >>> f"{1e3 * front_lag_s(0.040, front_hz=11_000.0):.2f} ms"
    '0.52 ms'
    """
    cutoff_hz = SPEED_OF_LIGHT_M_S / (2.0 * GUIDE_HEIGHT_M)
    return float(
        path_s * ((1.0 - (cutoff_hz / max(front_hz, 1.05 * cutoff_hz)) ** 2) ** -0.5 - 1.0)
    )


@dataclass(frozen=True)
class Causes:
    """Which sferics may have caused a whistler, and how likely each is.

    Parameters
    ----------
    index : ndarray, shape (k,)
        Place in the catalogue.
    time_s : ndarray, shape (k,)
        Arrival at the receiver.
    odds : ndarray, shape (k,)
        Odds against "none of those seen", before any prior on the path.
    """

    index: NDArray[np.int64]
    time_s: NDArray[np.float64]
    odds: NDArray[np.float64]


def possible_causes(catalogue: SfericCatalogue, *, predicted_s: float, sd_s: float) -> Causes:
    r"""Return the sferics near a predicted time with their odds.

    Parameters
    ----------
    catalogue : SfericCatalogue
        All sferics seen.
    predicted_s, sd_s : float
        Where the causative sferic must be, and the one-sigma of that.

    Returns
    -------
    Causes
        Every sferic within four sigma.

    Notes
    -----
    A mixture of one causative sferic among a Poisson background of rate :math:`\lambda`:

    .. math:: odds_k = \frac{1 - p_0}{p_0} \frac{N(t_k; \hat t, \sigma)}{\lambda}
              \frac{f_c(A_k)}{f_b(A_k)}

    with :math:`p_0` the share of unseen causes, and lognormal amplitudes, larger for causes.
    """
    near = np.flatnonzero(np.abs(catalogue.time_s - predicted_s) <= 4.0 * sd_s)
    time_s = catalogue.time_s[near]
    rate_hz = max(catalogue.rate_hz, 0.2)
    density = np.exp(-0.5 * ((time_s - predicted_s) / sd_s) ** 2) / (np.sqrt(2 * np.pi) * sd_s)
    odds = (1.0 - CAUSE_UNSEEN) / CAUSE_UNSEEN * density / rate_hz
    return Causes(near, time_s, odds * _amplitude_ratio(catalogue, near))


def _amplitude_ratio(catalogue: SfericCatalogue, index: NDArray[np.int64]) -> NDArray[np.float64]:
    """How much more likely each amplitude is for a causative sferic than for any other."""
    if len(index) == 0:
        return np.zeros(0)
    logs = np.log(catalogue.amplitude)
    middle, spread = float(np.mean(logs)), max(float(np.std(logs)), 0.3)
    ratio = CAUSE_STRONGER * (logs[index] - middle - 0.5 * CAUSE_STRONGER) / spread**2
    return np.asarray(np.exp(np.clip(ratio, -2.5, 2.5)))
