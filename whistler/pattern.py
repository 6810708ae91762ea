"""Time sub-bands against the pattern they share.

A duct is not one path: its sub-paths differ a little in density, so a whistler is a bundle of
pulses whose delays all scale with the travel time. In lag divided by travel time the bundle looks
the same at every frequency, however ragged it is. Aligning the sub-bands on that common pattern
times them to a fraction of the bundle's width; where the pattern sits as a whole is a question of
density only. Where sub-bands share no pattern, the caller keeps their own centres.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft, ndimage

from fieldlines.errors import FloatArray
from whistler.trace import Straightened, peak_offset

GRID_S = 1e-4
GRID_REACH_S = 0.06  # lags that take part, at the reference travel time
POWER_CLIP = 30.0  # a single bright sub-path must not be the whole pattern
NOISE_CUT = 4.0  # times the mean noise; what is below is not pattern
ROUNDS = 4
LEAST_SD_S = 8e-5  # a stroke's own pulse is no shorter
CENTRE_SD = 0.57  # cells of a pattern are not all alike; measured on synthetic ducts
LAG_SD = 0.18  # of strong sub-bands, in units of one over the band width; from synthetic ducts
THICK_SD = 0.8  # how much less alike the sub-bands of a thick trace are than they look
NOISE_LAG_SD = 1.3  # in the same units, at a peak as strong as the noise; falls with its root


@dataclass(frozen=True)
class Alignment:
    """Lags of sub-bands behind the curve they were de-dispersed with.

    Parameters
    ----------
    lag_s : ndarray, shape (bands,)
        Lag of each sub-band; the pattern's centre included.
    correlation : ndarray, shape (bands,)
        Of each sub-band with the mean of the others, 0 to 1.
    strength : ndarray, shape (bands,)
        Peak power of each sub-band over its noise.
    thickness_s : float
        Of the trace.
    centre_share_sd : float
        One-sigma of the pattern's centre as a share of the travel time: common to all sub-bands.
    """

    lag_s: FloatArray
    correlation: FloatArray
    strength: FloatArray
    thickness_s: float
    centre_share_sd: float

    def lag_sd_s(self, band_width_hz: float) -> FloatArray:
        """Return the one-sigma of each lag: larger for weak bands, and those unlike the others."""
        unlike = np.sqrt(np.maximum(1.0 - self.correlation**2, 0.01))
        ragged = np.sqrt(1.0 + THICK_SD * self.thickness_s * band_width_hz)
        by_shape = LAG_SD * ragged * unlike / np.maximum(self.correlation, 0.1)
        by_noise = NOISE_LAG_SD / np.sqrt(self.strength)
        variance = (by_shape**2 + by_noise**2) / band_width_hz**2 + LEAST_SD_S**2
        return np.asarray(np.sqrt(variance))


def align(
    view: Straightened, travel_s: FloatArray, *, search_s: float, thickness_s: float
) -> Alignment:
    """Return the lags that best bring the sub-bands' patterns together.

    Parameters
    ----------
    view : Straightened
        De-dispersed sub-bands.
    travel_s : ndarray, shape (bands,)
        Travel time at each sub-band; lags are compared in proportion to it.
    search_s : float
        Largest relative lag tried.
    thickness_s : float
        Thickness of the trace; what lies farther than three times it, and what the band width adds,
        from the pattern's middle takes no part.

    Returns
    -------
    Alignment
        Lags at each sub-band's own frequency.
    """
    reference_s = float(np.median(travel_s))
    grid_s = np.arange(-GRID_REACH_S, GRID_REACH_S, GRID_S)
    patterns = _patterns(view, travel_s / reference_s, grid_s, thickness_s)
    shift_s, correlation = _common_shifts(patterns, search_s)
    aligned = np.stack(
        [
            np.interp(grid_s + shift, grid_s, row)
            for shift, row in zip(shift_s, patterns, strict=True)
        ]
    )
    centre_s, width_s, cells = _shape(aligned.mean(axis=0), grid_s, view.band_width_hz)
    return Alignment(
        lag_s=(shift_s + centre_s) * travel_s / reference_s,
        correlation=correlation,
        strength=view.power.max(axis=1),
        thickness_s=thickness_s,
        centre_share_sd=CENTRE_SD * width_s / reference_s / np.sqrt(cells),
    )


def _patterns(
    view: Straightened, stretch: FloatArray, grid_s: FloatArray, thickness_s: float
) -> FloatArray:
    """Power against scaled lag, above the noise, each row of unit energy."""
    rows = np.stack(
        [np.interp(grid_s * k, view.lag_s, row) for k, row in zip(stretch, view.power, strict=True)]
    )
    rows = ndimage.gaussian_filter1d(np.minimum(rows, POWER_CLIP), 2.0, axis=1)
    rows = np.maximum(rows - NOISE_CUT, 0.0)
    reach_s = 3.0 * thickness_s + 1.5 / view.band_width_hz
    for _ in range(2):
        middle_s = _centre_of_mass(rows.sum(axis=0), grid_s, reach_s)
        rows = np.where(np.abs(grid_s - middle_s) < reach_s, rows, 0.0)
    return np.asarray(rows / np.maximum(np.linalg.norm(rows, axis=1, keepdims=True), 1e-12))


def _centre_of_mass(row: FloatArray, grid_s: FloatArray, reach_s: float) -> float:
    smooth = ndimage.gaussian_filter1d(row, max(0.3 * reach_s / GRID_S, 1.0))
    near = np.abs(grid_s - grid_s[int(np.argmax(smooth))]) < reach_s
    return float((row * grid_s)[near].sum() / max(row[near].sum(), 1e-12))


def _common_shifts(patterns: FloatArray, search_s: float) -> tuple[FloatArray, FloatArray]:
    """Shift of each row against the mean of the others, and their correlation there."""
    count, size = patterns.shape
    padded = int(fft.next_fast_len(2 * size, real=True))
    spectra = fft.rfft(patterns, padded, axis=1)
    frequency = np.arange(spectra.shape[1]) / padded
    reach = max(2, round(search_s / GRID_S))
    lags = np.arange(-reach, reach + 1)
    shift = np.zeros(count)
    correlation = np.zeros(count)
    for _ in range(ROUNDS):
        moved = spectra * np.exp(2j * np.pi * frequency * shift[:, None])
        others = moved.sum(axis=0) - moved
        norm = np.sqrt(np.maximum((np.abs(others) ** 2).mean(axis=1), 1e-30))
        score = fft.irfft(spectra * np.conj(others), padded, axis=1)[:, lags]
        scale = np.sqrt((np.abs(spectra) ** 2).mean(axis=1)) * norm
        at = np.argmax(score, axis=1)
        shift = lags[at] + peak_offset(score, at)
        correlation = score[np.arange(count), at] / np.maximum(scale, 1e-30)
        shift = shift - np.average(shift, weights=np.maximum(correlation, 1e-3) ** 2)
    return shift * GRID_S, np.clip(correlation, 0.0, 1.0)


def _shape(
    pattern: FloatArray, grid_s: FloatArray, band_width_hz: float
) -> tuple[float, float, float]:
    """Centre, RMS width beyond resolution, and number of independent cells of a pattern."""
    total = max(float(pattern.sum()), 1e-12)
    centre_s = float((pattern * grid_s).sum() / total)
    variance = float((pattern * (grid_s - centre_s) ** 2).sum() / total)
    own_s = 0.25 / band_width_hz
    cells = total**2 / max(float((pattern**2).sum()), 1e-24) * GRID_S * band_width_hz
    return centre_s, float(np.sqrt(max(variance - own_s**2, 0.0))), max(cells, 1.0)
