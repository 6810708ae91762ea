"""Hum of the public power supply: many harmonics of one wandering frequency."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from fieldlines.errors import FloatArray
from whistler.synthesis.parts import Mains
from whistler.synthesis.response import ComplexArray, receiver_response
from whistler.synthesis.sferics import Band

#: Points of the table of one period; at 120 harmonics linear reading errs by less than -90 dB.
TABLE_SIZE = 1 << 17
#: Time over which a load switching takes effect, s.
STEP_S = 0.004


@dataclass(frozen=True)
class Hum:
    """Rendered hum and its true frequency.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        Amplitude, noise units.
    frequency_hz : ndarray, shape (n,)
        Fundamental at each sample, Hz.
    """

    samples: FloatArray
    frequency_hz: FloatArray


def mains_hum(mains: Mains, generator: np.random.Generator, *, band: Band, frame_count: int) -> Hum:
    """Return mains hum with drift and load switchings.

    Parameters
    ----------
    mains : Mains
        Frequency, level and number of harmonics.
    generator : numpy.random.Generator
        Source of the draws.
    band : Band
        The receiver.
    frame_count : int
        Length, samples.

    Returns
    -------
    Hum
        Samples and the fundamental.
    """
    time_s = np.arange(frame_count) / band.sample_rate_hz
    frequency = mains.frequency_hz + _drift(mains, generator, time_s)
    phase = np.cumsum(frequency) / band.sample_rate_hz
    duration_s = frame_count / band.sample_rate_hz
    count = generator.poisson(mains.steps_per_minute * duration_s / 60.0)
    steps = np.sort(generator.uniform(0.0, duration_s, count))
    amplitudes = _amplitudes(mains, generator, band)
    samples = np.zeros(frame_count)
    edges = np.concatenate(([-np.inf], steps, [np.inf]))
    for begin_s, end_s in pairwise(edges):
        first, last = np.searchsorted(time_s, [begin_s, end_s + STEP_S])
        part = slice(int(first), int(last))
        window = _ramp(time_s[part] - begin_s) * (1.0 - _ramp(time_s[part] - end_s))
        samples[part] += window * _read_table(_period(amplitudes), phase[part])
        amplitudes = _switched(amplitudes, generator)
    return Hum(samples, frequency)


def _drift(mains: Mains, generator: np.random.Generator, time_s: FloatArray) -> FloatArray:
    """Two slow sines whose sum never exceeds the drift."""
    period_s = generator.uniform((15.0, 60.0), (40.0, 150.0))
    angle = 2.0 * np.pi * (time_s / period_s[:, None] + generator.random((2, 1)))
    return np.asarray(mains.drift_hz * np.array([0.4, 0.6]) @ np.sin(angle))


def _amplitudes(mains: Mains, generator: np.random.Generator, band: Band) -> ComplexArray:
    """Complex amplitudes of the harmonics that fit into the band, r.m.s. sum as asked."""
    order = np.arange(1.0, mains.harmonics + 1.0)
    size = order**-1.7 * np.where(order % 2 == 1, 1.0, 0.35)
    size = size * np.exp(generator.normal(0.0, 0.5, order.size))
    frequency = order * mains.frequency_hz
    size = size * np.abs(
        receiver_response(frequency, sample_rate_hz=band.sample_rate_hz, low_cut_hz=band.low_cut_hz)
    )
    size *= mains.level * np.sqrt(2.0 / np.sum(size**2))
    return np.asarray(size * np.exp(2j * np.pi * generator.random(order.size)))


def _switched(amplitudes: ComplexArray, generator: np.random.Generator) -> ComplexArray:
    """Amplitudes after a load was switched: a random change of every harmonic."""
    change = generator.normal(0.0, 0.5, amplitudes.size) + 1j * generator.normal(
        0.0, 0.5, amplitudes.size
    )
    return np.asarray(amplitudes + np.abs(amplitudes) * change)


def _period(amplitudes: ComplexArray) -> FloatArray:
    spectrum = np.zeros(TABLE_SIZE // 2 + 1, dtype=complex)
    spectrum[1 : amplitudes.size + 1] = amplitudes
    period = np.fft.irfft(spectrum, TABLE_SIZE) * (TABLE_SIZE / 2)
    return np.append(period, period[0])


def _read_table(period: FloatArray, phase_cycles: FloatArray) -> FloatArray:
    position = (phase_cycles % 1.0) * TABLE_SIZE
    index = position.astype(np.int64)
    fraction = position - index
    return np.asarray(period[index] * (1.0 - fraction) + period[index + 1] * fraction)


def _ramp(time_s: FloatArray) -> FloatArray:
    return np.asarray(np.clip(time_s / STEP_S, 0.0, 1.0))
