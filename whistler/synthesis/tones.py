"""Narrow-band signals: chorus elements and transmitters."""

from __future__ import annotations

import numpy as np

from fieldlines.errors import FloatArray
from whistler.synthesis.level import CELL_S, cell_length, hann
from whistler.synthesis.noise import UNIT_BANDWIDTH_HZ
from whistler.synthesis.parts import Chorus, Transmitter
from whistler.synthesis.sferics import Band

#: Elements of a chorus cluster follow each other at about this spacing, s.
CLUSTER_SPACING_S = 0.35


def tone_amplitude(level_db: float) -> float:
    """Return the amplitude of a steady tone that stands so far above the receiver noise in a cell.

    Parameters
    ----------
    level_db : float
        Power in the 21.3 ms Hann cell over the mean power of the receiver noise there, dB.

    Returns
    -------
    float
        Amplitude, noise units.

    Notes
    -----
    A tone of amplitude a gives :math:`(a \\sum w / 2)^2`, white noise of density N per Hz
    (one-sided) :math:`N f_s \\sum w^2 / 2`; the Hann window has a noise bandwidth of 1.5 bins.
    """
    window = hann(cell_length(48_000.0))
    bandwidth_hz = np.sum(window**2) / np.sum(window) ** 2 * window.size / CELL_S
    return float(np.sqrt(2.0 * bandwidth_hz / UNIT_BANDWIDTH_HZ) * 10.0 ** (level_db / 20.0))


def chorus_elements(
    chorus: Chorus, generator: np.random.Generator, *, band: Band, frame_count: int
) -> FloatArray:
    """Return clusters of rising and falling tones.

    Parameters
    ----------
    chorus : Chorus
        The population.
    generator : numpy.random.Generator
        Source of the draws.
    band : Band
        For the sampling rate.
    frame_count : int
        Length, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        Noise units.
    """
    duration_s = frame_count / band.sample_rate_hz
    total = np.zeros(frame_count)
    clusters = generator.poisson(chorus.rate_hz * duration_s / 5.0)
    for _ in range(clusters):
        time_s = generator.uniform(-1.0, duration_s)
        base_hz = generator.uniform(chorus.low_hz, chorus.high_hz)
        falls = generator.random() < chorus.falling_share
        for _ in range(int(generator.geometric(0.2))):
            start_hz = base_hz * np.exp(generator.normal(0.0, 0.08))
            element = _element(chorus, generator, band, start_hz, falls)
            _add(total, element, int(time_s * band.sample_rate_hz))
            time_s += CLUSTER_SPACING_S * np.exp(generator.normal(0.0, 0.6))
    return total


def _element(
    chorus: Chorus, generator: np.random.Generator, band: Band, start_hz: float, falls: bool
) -> FloatArray:
    """One tone of 0.1 to 0.5 s, bent, with a rough edge of several close components."""
    length_s = generator.uniform(0.1, 0.5)
    share = np.arange(int(length_s * band.sample_rate_hz)) / (length_s * band.sample_rate_hz)
    slope_hz_s = np.exp(generator.uniform(np.log(1e3), np.log(1e4)))
    excursion_hz = min(slope_hz_s * length_s, 0.8 * start_hz if falls else 6000.0)
    bend = generator.uniform(0.7, 1.8)
    sweep = excursion_hz * share ** (1.0 / bend if falls else bend)
    frequency = start_hz - sweep if falls else start_hz + sweep
    frequency = np.clip(frequency, 200.0, 0.45 * band.sample_rate_hz)
    phase = 2.0 * np.pi * np.cumsum(frequency) / band.sample_rate_hz
    roughness = np.zeros(share.size, dtype=complex)
    for offset_hz in generator.normal(0.0, 25.0, 5):
        turn = 2.0 * np.pi * offset_hz * length_s * share + generator.uniform(0.0, 2.0 * np.pi)
        roughness += np.exp(1j * turn) / np.sqrt(5.0)
    size = tone_amplitude(chorus.level_db + generator.normal(0.0, 4.0))
    envelope = np.sqrt(np.sin(np.pi * share))
    return np.asarray(size * envelope * (np.exp(1j * phase) * roughness).real)


def _add(total: FloatArray, element: FloatArray, first: int) -> None:
    begin, end = max(first, 0), min(first + element.size, total.size)
    if end > begin:
        total[begin:end] += element[begin - first : end - first]


def transmitter_signal(
    transmitter: Transmitter, generator: np.random.Generator, *, band: Band, frame_count: int
) -> FloatArray:
    """Return a steady, keyed or swept carrier.

    Parameters
    ----------
    transmitter : Transmitter
        The transmitter.
    generator : numpy.random.Generator
        Source of its phase and of the keying.
    band : Band
        For the sampling rate.
    frame_count : int
        Length, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        Noise units; silent when the carrier lies above half the sampling rate.
    """
    time_s = np.arange(frame_count) / band.sample_rate_hz
    cycle = time_s / transmitter.period_s + generator.random()
    frequency = np.full(frame_count, transmitter.frequency_hz)
    envelope = np.ones(frame_count)
    if transmitter.keying == "swept":
        frequency += transmitter.span_hz * (cycle % 1.0)
    elif transmitter.keying == "keyed":
        pattern = generator.random(64) < 0.55
        on = pattern[(cycle * 4.0).astype(np.int64) % pattern.size].astype(np.float64)
        ramp = max(int(0.004 * band.sample_rate_hz), 1)
        envelope = np.convolve(on, np.full(ramp, 1.0 / ramp), mode="same")
    envelope *= (frequency > 0.0) & (frequency < 0.47 * band.sample_rate_hz)
    phase = 2.0 * np.pi * (np.cumsum(frequency) / band.sample_rate_hz + generator.random())
    return np.asarray(tone_amplitude(transmitter.level_db) * envelope * np.cos(phase))
