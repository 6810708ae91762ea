"""The receiver's pass band, shared by everything that passes through it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import fft

from fieldlines.errors import FloatArray

ComplexArray = npt.NDArray[np.complex128]


def receiver_response(
    frequency_hz: FloatArray, *, sample_rate_hz: float, low_cut_hz: float
) -> ComplexArray:
    """Return the transfer function of the receiver.

    Parameters
    ----------
    frequency_hz : ndarray, shape (n,)
        Frequencies, Hz.
    sample_rate_hz : float
        Sampling rate; a cosine taper from 0.43 to 0.49 of it stands for the anti-alias filter.
    low_cut_hz : float
        Corner of the second-order (Butterworth) high-pass.

    Returns
    -------
    ndarray, shape (n,)
        Complex gain, 1 in the middle of the band.

    Examples
    --------
    >>> gain = receiver_response(np.array([150.0, 4000.0]), sample_rate_hz=32000, low_cut_hz=150)
    >>> [f"{abs(value):.3f}" for value in gain]
    ['0.707', '1.000']
    """
    ratio = low_cut_hz / np.maximum(frequency_hz, 1e-3)
    high_pass = 1.0 / (1.0 - ratio**2 - 1j * np.sqrt(2.0) * ratio)
    taper = np.clip((0.49 - frequency_hz / sample_rate_hz) / 0.06, 0.0, 1.0)
    return np.asarray(high_pass * np.sin(0.5 * np.pi * taper) ** 2)


def fft_frequencies(frame_count: int, *, sample_rate_hz: float) -> FloatArray:
    """Return the frequencies of a real transform of that many samples, Hz.

    Parameters
    ----------
    frame_count : int
        Transform length.
    sample_rate_hz : float
        Sampling rate, Hz.

    Returns
    -------
    ndarray, shape (frame_count // 2 + 1,)
        Frequencies from 0, Hz.
    """
    return np.asarray(fft.rfftfreq(frame_count, 1.0 / sample_rate_hz))
