"""Populations of sferics, and the sferic of a whistler's own stroke."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft

from fieldlines.errors import FloatArray
from whistler.synthesis.parts import Sferics
from whistler.synthesis.response import ComplexArray, fft_frequencies, receiver_response
from whistler.synthesis.waveguide import LEAD_S, PULSE_S, Discharge, Guide, sferic_spectrum

#: Different pulses made for a population, and sub-sample shifts kept of each.
SHAPE_COUNT = 40
SHIFT_COUNT = 8


@dataclass(frozen=True)
class Band:
    """What the receiver passes: everything below is rendered for one band.

    Parameters
    ----------
    sample_rate_hz : float
        Sampling rate.
    low_cut_hz : float
        Corner of the high-pass.
    """

    sample_rate_hz: float
    low_cut_hz: float


@dataclass(frozen=True)
class Arrivals:
    """The pulses of a population.

    Parameters
    ----------
    time_s : ndarray, shape (n,)
        Arrival of the wave front, s from the first sample.
    peak : ndarray, shape (n,)
        Peak amplitude, noise units, with sign.
    shape : ndarray of int, shape (n,)
        Which pulse shape.
    """

    time_s: FloatArray
    peak: FloatArray
    shape: np.ndarray[tuple[int], np.dtype[np.int64]]


def pulse_length(band: Band) -> int:
    """Return the transform length of one pulse, samples."""
    return int(fft.next_fast_len(int((LEAD_S + PULSE_S) * band.sample_rate_hz), real=True))


def pulse_spectrum(
    band: Band, *, distance_m: float, guide: Guide, discharge: Discharge
) -> ComplexArray:
    """Return the spectrum of one sferic as received, scaled to a peak of 1 in the time domain.

    Parameters
    ----------
    band : Band
        The receiver.
    distance_m : float
        Distance of the stroke, m.
    guide, discharge : Guide, Discharge
        The waveguide and the current.

    Returns
    -------
    ndarray, shape (pulse_length // 2 + 1,)
        Spectrum whose inverse transform has its wave front at `LEAD_S`.
    """
    length = pulse_length(band)
    frequency = fft_frequencies(length, sample_rate_hz=band.sample_rate_hz)
    spectrum = sferic_spectrum(frequency, distance_m=distance_m, guide=guide, discharge=discharge)
    spectrum *= receiver_response(
        frequency, sample_rate_hz=band.sample_rate_hz, low_cut_hz=band.low_cut_hz
    )
    spectrum *= np.exp(-2j * np.pi * frequency * LEAD_S)
    spectrum[0] = 0.0
    return np.asarray(spectrum / np.abs(fft.irfft(spectrum, length)).max())


def draw_discharge(generator: np.random.Generator) -> Discharge:
    """Return a stroke current with time constants drawn from the usual range."""
    return Discharge(
        rise_s=float(generator.uniform(4e-6, 20e-6)),
        fall_s=float(np.exp(generator.uniform(np.log(50e-6), np.log(300e-6)))),
        tail=float(generator.uniform(0.0, 0.5)),
    )


def draw_spectra(sferics: Sferics, generator: np.random.Generator, *, band: Band) -> ComplexArray:
    """Return spectra of pulses from distances all over a population's range.

    Parameters
    ----------
    sferics : Sferics
        The population.
    generator : numpy.random.Generator
        Source of the draws.
    band : Band
        The receiver.

    Returns
    -------
    ndarray, shape (SHAPE_COUNT, m)
        Spectra with unit peak in time.
    """
    steps = (np.arange(SHAPE_COUNT) + generator.random(SHAPE_COUNT)) / SHAPE_COUNT
    distances = sferics.near_m * (sferics.far_m / sferics.near_m) ** steps
    return np.array(
        [
            pulse_spectrum(
                band,
                distance_m=float(distance),
                guide=Guide(
                    sferics.reflection_height_m * generator.normal(1.0, 0.01),
                    sferics.tweek_db + generator.normal(0.0, 3.0),
                ),
                discharge=draw_discharge(generator),
            )
            for distance in distances
        ]
    )


def draw_arrivals(
    sferics: Sferics, generator: np.random.Generator, *, duration_s: float
) -> Arrivals:
    """Return arrival times, peaks and shapes of a population.

    Parameters
    ----------
    sferics : Sferics
        The population.
    generator : numpy.random.Generator
        Source of the draws.
    duration_s : float
        Length of the recording, s.

    Returns
    -------
    Arrivals
        In order of time. Flashes are Poisson; later strokes of one follow at about 60 ms, weaker,
        from the same place.
    """
    end_s = duration_s
    if sferics.duration_s is not None:
        end_s = min(duration_s, sferics.start_s + sferics.duration_s)
    length_s = max(end_s - sferics.start_s, 0.0)
    flashes = generator.poisson(sferics.rate_hz * (1.0 - sferics.clustering) * length_s)
    start = generator.uniform(sferics.start_s, sferics.start_s + length_s, flashes)
    strokes = generator.geometric(1.0 - sferics.clustering, flashes)
    flash = np.repeat(np.arange(flashes), strokes)
    later = np.arange(flash.size) - np.repeat(np.cumsum(strokes) - strokes, strokes)
    gaps = np.where(later > 0, 0.06 * np.exp(generator.normal(0.0, 0.5, flash.size)), 0.0)
    time = start[flash] + _cumulative_within(gaps, later)
    level_db = generator.normal(0.0, sferics.spread_db, flashes)[flash]
    level_db += np.where(later > 0, generator.normal(-2.0, 3.0, flash.size), 0.0)
    sign = generator.choice([-1.0, 1.0], flashes, p=[0.2, 0.8])[flash]
    shape = generator.integers(0, SHAPE_COUNT, flashes)[flash]
    keep = np.flatnonzero(time < end_s)
    keep = keep[np.argsort(time[keep], kind="stable")]
    peak = sferics.median_peak * sign * 10.0 ** (level_db / 20.0)
    return Arrivals(time[keep], peak[keep], shape[keep])


def _cumulative_within(gaps: FloatArray, later: np.ndarray) -> FloatArray:
    """Sum gaps from the first stroke of each flash on."""
    total = np.cumsum(gaps)
    first = np.flatnonzero(later == 0)
    return np.asarray(total - np.repeat(total[first] - gaps[first], np.diff([*first, gaps.size])))


def place_pulses(
    spectra: ComplexArray, arrivals: Arrivals, *, band: Band, frame_count: int
) -> FloatArray:
    """Return the sum of a population's pulses.

    Parameters
    ----------
    spectra : ndarray, shape (k, m)
        Spectra of the pulse shapes, front at `LEAD_S`.
    arrivals : Arrivals
        Where to put them.
    band : Band
        The receiver.
    frame_count : int
        Length of the recording, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        Amplitude, noise units; times are kept to an eighth of a sample.
    """
    length = pulse_length(band)
    frequency = fft_frequencies(length, sample_rate_hz=band.sample_rate_hz)
    shifts_s = np.arange(SHIFT_COUNT) / (SHIFT_COUNT * band.sample_rate_hz)
    ramps = np.exp(-2j * np.pi * frequency * shifts_s[:, None])
    pulses = fft.irfft(spectra[:, None, :] * ramps, length)
    lengths = _useful_lengths(pulses)
    position = (arrivals.time_s - LEAD_S) * band.sample_rate_hz + 0.5 / SHIFT_COUNT
    first = np.floor(position).astype(np.int64)
    shift = ((position - first) * SHIFT_COUNT).astype(np.int64)
    lead = length
    total = np.zeros(frame_count + 2 * length)
    for start, which, peak, shape in zip(first, shift, arrivals.peak, arrivals.shape, strict=True):
        size = lengths[shape]
        begin = start + lead
        total[begin : begin + size] += peak * pulses[shape, which, :size]
    return total[lead : lead + frame_count]


def _useful_lengths(pulses: FloatArray) -> list[int]:
    """Samples after which a unit-peak pulse stays below 3e-4."""
    loud = np.abs(pulses).max(axis=1) > 3e-4
    return [int(np.flatnonzero(row)[-1]) + 1 for row in loud]


def place_one(
    spectrum: ComplexArray, *, time_s: float, peak: float, band: Band, frame_count: int
) -> FloatArray:
    """Return a recording with one pulse, its front exactly at a time.

    Parameters
    ----------
    spectrum : ndarray, shape (m,)
        Spectrum of the pulse, front at `LEAD_S`.
    time_s : float
        Arrival of the front, s from the first sample.
    peak : float
        Amplitude, noise units.
    band : Band
        The receiver.
    frame_count : int
        Length of the recording, samples.

    Returns
    -------
    ndarray, shape (frame_count,)
        Amplitude, noise units.
    """
    length = pulse_length(band)
    frequency = fft_frequencies(length, sample_rate_hz=band.sample_rate_hz)
    position = (time_s - LEAD_S) * band.sample_rate_hz
    first = int(np.floor(position))
    delay_s = (position - first) / band.sample_rate_hz
    pulse = peak * fft.irfft(spectrum * np.exp(-2j * np.pi * frequency * delay_s), length)
    total = np.zeros(frame_count)
    begin, end = max(first, 0), min(first + length, frame_count)
    if end > begin:
        total[begin:end] = pulse[begin - first : end - first]
    return total
