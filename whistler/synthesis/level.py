r"""The strength of a whistler in a background, and the factor that sets it.

Definition. The whistler alone and the background without it (but with its sferics) are both seen
through Hann windows of 21.3 ms. The *noise* of a channel is the median over time of the power of
the background there, over ln 2: the mean power of Gaussian noise that has this median, hardly moved
by sferics and other short signals. The *signal* of a channel is the power of the whistler in the
cell centred on its true arrival :math:`t_l + h\,t(f)`. The *cell SNR* is the median over the
channels of the band of signal over noise; `snr_db` is 10 log10 of it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import fft

from fieldlines.errors import FloatArray

#: Length of the Hann cell, s.
CELL_S = 1024 / 48_000
#: Cells that are enough for a median good to 0.1 dB.
MOST_CELLS = 6000
#: Share of a cell that may lie on samples left out, and cells kept however few do better.
LEFT_OUT_SHARE = 0.1
FEWEST_CELLS = 200


@dataclass(frozen=True)
class NoiseLevel:
    """Noise power of a background in each channel of the cell.

    Parameters
    ----------
    frequency_hz : ndarray, shape (m,)
        Centres of the channels, Hz.
    power : ndarray, shape (m,)
        Mean power of the noise in a cell, squared noise units times squared window sum.
    """

    frequency_hz: FloatArray
    power: FloatArray


def cell_length(sample_rate_hz: float) -> int:
    """Return the length of the cell, samples (even).

    Examples
    --------
    >>> cell_length(48_000), cell_length(32_000)
    (1024, 682)
    """
    return 2 * round(0.5 * CELL_S * sample_rate_hz)


def hann(size: int) -> FloatArray:
    """Return a periodic Hann window of that many samples."""
    return np.asarray(0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(size) / size))


def noise_level(
    background: FloatArray,
    *,
    sample_rate_hz: float,
    left_out: npt.NDArray[np.bool_] | None = None,
) -> NoiseLevel:
    """Return the noise power of every channel of a background.

    Parameters
    ----------
    background : ndarray, shape (n,)
        Recording without its whistlers.
    sample_rate_hz : float
        Sampling rate.
    left_out : ndarray of bool, shape (n,), optional
        Samples that are not noise: cells of which they fill more than a tenth do not count, unless
        fewer than 200 others are left; then those with the least of them do.

    Returns
    -------
    NoiseLevel
        Median over evenly spaced cells, at most half overlapping, over ln 2.
    """
    size = cell_length(sample_rate_hz)
    step = max(size // 2, background.size // MOST_CELLS)
    frames = np.lib.stride_tricks.sliding_window_view(background, size)[::step]
    if left_out is not None:
        share = np.lib.stride_tricks.sliding_window_view(left_out, size)[::step].mean(axis=1)
        fewest = np.sort(share)[: min(FEWEST_CELLS, share.size)][-1]
        frames = frames[share <= max(LEFT_OUT_SHARE, fewest)]
    spectra = fft.rfft(frames * hann(size), axis=1)
    power = np.median(spectra.real**2 + spectra.imag**2, axis=0) / np.log(2.0)
    return NoiseLevel(fft.rfftfreq(size, 1.0 / sample_rate_hz), power)


def ridge_power(
    samples: FloatArray, *, arrival_s: FloatArray, frequency_hz: FloatArray, sample_rate_hz: float
) -> FloatArray:
    """Return the power of a waveform in the cells on a curve.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        The whistler alone.
    arrival_s : ndarray, shape (m,)
        Centre of the cell of each channel, s from the first sample.
    frequency_hz : ndarray, shape (m,)
        Frequency of each channel, Hz.
    sample_rate_hz : float
        Sampling rate.

    Returns
    -------
    ndarray, shape (m,)
        Power as in `NoiseLevel`; samples before the first and after the last count as 0.
    """
    size = cell_length(sample_rate_hz)
    padded = np.concatenate((np.zeros(size), samples, np.zeros(size)))
    first = np.round(arrival_s * sample_rate_hz).astype(np.int64) - size // 2 + size
    first = np.clip(first, 0, padded.size - size)
    frames = padded[first[:, None] + np.arange(size)] * hann(size)
    angle = -2j * np.pi * frequency_hz[:, None] / sample_rate_hz * np.arange(size)
    return np.asarray(np.abs(np.einsum("ij,ij->i", frames, np.exp(angle))) ** 2)


def cell_snr(
    samples: FloatArray,
    *,
    arrival_s: FloatArray,
    channels: np.ndarray[tuple[int], np.dtype[np.int64]],
    noise: NoiseLevel,
    sample_rate_hz: float,
) -> float:
    """Return the cell SNR of a whistler as a power ratio (see the module's definition).

    Parameters
    ----------
    samples : ndarray, shape (n,)
        The whistler alone.
    arrival_s : ndarray, shape (m,)
        True arrival of each channel, s from the first sample.
    channels : ndarray of int, shape (m,)
        The channels of the band.
    noise : NoiseLevel
        Of the background.
    sample_rate_hz : float
        Sampling rate.

    Returns
    -------
    float
        Median over the band of signal over noise.
    """
    signal = ridge_power(
        samples,
        arrival_s=arrival_s,
        frequency_hz=noise.frequency_hz[channels],
        sample_rate_hz=sample_rate_hz,
    )
    return float(np.median(signal / noise.power[channels]))
