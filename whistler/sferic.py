"""Sferics: the catalogue kept while blanking, and which of them caused a whistler."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

MARK_SIGMA = 4.0
BAND_SIGMA = 2.5
VOTES = 3  # parts of the band, of four, that a sferic fills at once; a whistler fills one or two
GUARD_S = 0.001
BAND_EDGES = (0.35, 0.53, 0.75)  # of the top: 3.5, 5.3, 7.5 kHz of 10, above the absorption band


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
    """

    time_s: NDArray[np.float64]
    amplitude: NDArray[np.float64]
    duration_s: float

    @property
    def rate_hz(self) -> float:
        """Sferics per second."""
        return len(self.time_s) / self.duration_s if self.duration_s > 0 else 0.0

    def shifted(self, by_s: float) -> SfericCatalogue:
        """Return the same sferics on a clock `by_s` later."""
        return SfericCatalogue(self.time_s + by_s, self.amplitude, self.duration_s)


def catalogue_sferics(
    whitened: NDArray[np.float32], *, sample_rate_hz: float, band_high_hz: float
) -> tuple[SfericCatalogue, NDArray[np.bool_]]:
    """Return the sferics in whitened audio and the samples they spoil.

    Parameters
    ----------
    whitened : ndarray, shape (n,), float32
        Audio of unit robust variance.
    sample_rate_hz : float
        Its rate.
    band_high_hz : float
        Top of the band; four parts of it are tested apart, so that a strong whistler, narrow at any
        one moment, is not taken for a sferic.

    Returns
    -------
    SfericCatalogue
        Times from the first sample.
    ndarray, shape (n,), bool
        True where a sferic or its 1 ms guard spoils the sample.
    """
    loud = np.abs(whitened) > MARK_SIGMA
    if loud.any():
        loud &= _broadband(whitened, sample_rate_hz, band_high_hz)
    guard = max(1, round(GUARD_S * sample_rate_hz))
    marked = np.asarray(ndimage.maximum_filter1d(loud, 2 * guard + 1))
    starts = np.flatnonzero(np.diff(marked.astype(np.int8), prepend=0) == 1)
    stops = np.flatnonzero(np.diff(marked.astype(np.int8), append=0) == -1) + 1
    strength = np.abs(whitened)
    amplitude = np.array([strength[a:b].max() for a, b in zip(starts, stops, strict=True)])
    time_s = np.where(starts > 0, starts + guard, np.argmax(loud)) / sample_rate_hz
    catalogue = SfericCatalogue(time_s, amplitude, len(whitened) / sample_rate_hz)
    return catalogue, marked


def _broadband(
    whitened: NDArray[np.float32], sample_rate_hz: float, band_high_hz: float
) -> NDArray[np.bool_]:
    """True where at least three of four parts of the band stand out together."""
    total = int(fft.next_fast_len(len(whitened), real=True))
    spectrum = fft.rfft(whitened, total)
    edges_hz = (0.0, *(part * band_high_hz for part in BAND_EDGES), sample_rate_hz)
    bins = [min(round(edge / sample_rate_hz * total), len(spectrum)) for edge in edges_hz]
    half = round(0.5 * GUARD_S * sample_rate_hz)
    votes = np.zeros(len(whitened), np.int8)
    for low, high in zip(bins[:-1], bins[1:], strict=True):
        part = np.zeros_like(spectrum)
        part[low:high] = spectrum[low:high]
        band = np.abs(fft.irfft(part, total)[: len(whitened)])
        sigma = float(np.median(band[::7])) / 0.6745
        votes += ndimage.maximum_filter1d(band, 2 * half + 1) > BAND_SIGMA * max(sigma, 1e-6)
    return np.asarray(votes >= VOTES)


CAUSE_UNSEEN = 0.15  # prior share of causative sferics too weak to be catalogued (our own estimate)
CAUSE_STRONGER = 0.7  # in ln amplitude: strokes that make whistlers are the strong ones
READING_SD_S = 0.0005  # of a front on the whitened audio


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

    def probability(self) -> NDArray[np.float64]:
        """Return the probability of each sferic; what is missing to one is "none"."""
        return self.odds / (1.0 + self.odds.sum())


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

    with :math:`p_0` the share of unseen causes and lognormal amplitudes, those of causes shifted up.
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
    return np.exp(np.clip(ratio, -2.5, 2.5))
