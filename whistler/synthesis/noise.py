"""Stationary noise: receiver, the sum of weak strokes, hiss."""

from __future__ import annotations

import numpy as np
from scipy import fft

from fieldlines.errors import FloatArray
from whistler.synthesis.parts import Hiss, Noise
from whistler.synthesis.response import fft_frequencies, receiver_response
from whistler.synthesis.sferics import Band
from whistler.synthesis.waveguide import Discharge, Guide, sferic_spectrum

#: Bandwidth in which the receiver noise has unit r.m.s., Hz.
UNIT_BANDWIDTH_HZ = 10e3


def white_rms(sample_rate_hz: float) -> float:
    """Return the r.m.s. of the white receiver noise over the whole band, noise units."""
    return float(np.sqrt(0.5 * sample_rate_hz / UNIT_BANDWIDTH_HZ))


def stationary_noise(
    noise: Noise, generator: np.random.Generator, *, band: Band, frame_count: int
) -> FloatArray:
    """Return receiver noise with the atmospheric background added in power.

    Parameters
    ----------
    noise : Noise
        Levels.
    generator : numpy.random.Generator
        Source of the samples.
    band : Band
        The receiver.
    frame_count : int
        Length, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        Gaussian noise, noise units.
    """
    length = fft.next_fast_len(frame_count, real=True)
    frequency = fft_frequencies(length, sample_rate_hz=band.sample_rate_hz)
    shape = np.sqrt(1.0 + 10.0 ** (noise.atmospheric_db / 10.0) * atmospheric_density(frequency))
    return _filtered(generator, shape * _gain(frequency, band), band, frame_count)


def atmospheric_density(frequency_hz: FloatArray) -> FloatArray:
    """Return the power spectrum of many distant strokes, 1 at its strongest frequency.

    Parameters
    ----------
    frequency_hz : ndarray, shape (n,)
        Frequencies, Hz, from 0 up.

    Returns
    -------
    ndarray, shape (n,)
        Relative power density: the mean over distances of 2 to 8 Mm, nearly empty from 1 to 3 kHz.
    """
    coarse = np.linspace(0.0, float(frequency_hz[-1]), 2048)
    power = np.zeros_like(coarse)
    for distance_m in (2e6, 3e6, 4.5e6, 6e6, 8e6):
        spectrum = sferic_spectrum(
            coarse, distance_m=distance_m, guide=Guide(), discharge=Discharge()
        )
        power += np.abs(spectrum) ** 2 / np.max(np.abs(spectrum[coarse > 3000.0]) ** 2)
    power[coarse < 100.0] = 0.0
    return np.asarray(np.interp(frequency_hz, coarse, power / power[coarse > 3000.0].max()))


def hiss_noise(
    hiss: Hiss, generator: np.random.Generator, *, band: Band, frame_count: int
) -> FloatArray:
    """Return a band of hiss whose strength wanders.

    Parameters
    ----------
    hiss : Hiss
        Band and level.
    generator : numpy.random.Generator
        Source of the samples.
    band : Band
        The receiver.
    frame_count : int
        Length, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        Noise units.
    """
    length = fft.next_fast_len(frame_count, real=True)
    frequency = fft_frequencies(length, sample_rate_hz=band.sample_rate_hz)
    edge_hz = 0.15 * (hiss.high_hz - hiss.low_hz) + 50.0
    shape = 10.0 ** (hiss.level_db / 20.0) / (
        (1.0 + np.exp(-(frequency - hiss.low_hz) / (0.25 * edge_hz)))
        * (1.0 + np.exp(np.minimum((frequency - hiss.high_hz) / (0.25 * edge_hz), 500.0)))
    )
    samples = _filtered(generator, shape * _gain(frequency, band), band, frame_count)
    return samples * slow_modulation(
        generator, depth=hiss.modulation, scale_s=0.7, band=band, frame_count=frame_count
    )


def slow_modulation(
    generator: np.random.Generator, *, depth: float, scale_s: float, band: Band, frame_count: int
) -> FloatArray:
    """Return a positive factor around 1 that changes over a time scale.

    Parameters
    ----------
    generator : numpy.random.Generator
        Source of the draws.
    depth : float
        R.m.s. of its logarithm.
    scale_s : float
        Spacing of its independent values, s.
    band : Band
        For the sampling rate.
    frame_count : int
        Length, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        The factor.
    """
    duration_s = frame_count / band.sample_rate_hz
    knots = np.arange(int(np.ceil(duration_s / scale_s)) + 2) * scale_s
    values = np.exp(depth * generator.normal(size=knots.size))
    return np.interp(np.arange(frame_count) / band.sample_rate_hz, knots, values)


def _gain(frequency_hz: FloatArray, band: Band) -> FloatArray:
    return np.abs(
        receiver_response(
            frequency_hz, sample_rate_hz=band.sample_rate_hz, low_cut_hz=band.low_cut_hz
        )
    )


def _filtered(
    generator: np.random.Generator, shape: FloatArray, band: Band, frame_count: int
) -> FloatArray:
    """White noise of the unit density through an amplitude response."""
    length = fft.next_fast_len(frame_count, real=True)
    white = generator.standard_normal(length) * white_rms(band.sample_rate_hz)
    return np.asarray(fft.irfft(fft.rfft(white) * shape, length)[:frame_count])
