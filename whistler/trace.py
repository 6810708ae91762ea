"""The measured points of one whistler path: de-disperse with the best curve, time the sub-bands.

Multiplying the spectrum by the phase of the current curve turns a whistler that follows it into a
pulse; each sub-band's pulse is then early or late by what the curve still lacks. The pulse's width
beyond the sub-band's own resolution is the trace's thickness, and enters the sigma of each time.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

from whistler.cleaning import LN2, CleanAudio
from whistler.spectrogram import Spectrogram

PULSE_LEAD_S = 0.35  # audio kept before and after the de-dispersed pulse: noise is measured there
SUB_BAND_HZ = 400.0  # spacing of the sub-bands; their Hann passbands are twice as wide
NOISE_GAP_S = 0.12
FEWEST_SUB_BANDS = 4
EDGE_S = 0.03  # kept clear at the ends of the audio
LEAST_SD_S = 1e-4
COARSE_S = 0.004  # smoothing under which the speckle of a thick trace runs together
STACK_CLIP = 20.0
LEAST_SNR = 6.0  # of a timed sub-band: chance peaks in the window exceed it once in thirty bands
HANN_PULSE_WIDTH = 0.72  # half-power width of a Hann passband's pulse, in units of one over spacing
TIMING_FACTOR = 0.551 * 1.2  # bound for a flat sub-band, and what peak-picking costs over it

Curve = Callable[[NDArray[np.float64]], NDArray[np.float64]]


@dataclass(frozen=True)
class Trace:
    """Arrival times along one path, by frequency.

    Parameters
    ----------
    frequency_hz : ndarray, shape (n,)
        Frequencies, Hz.
    time_s : ndarray, shape (n,)
        Arrival times from the recording's first frame, s.
    time_sd_s : ndarray, shape (n,)
        One-sigma of the times, s.
    """

    frequency_hz: NDArray[np.float64]
    time_s: NDArray[np.float64]
    time_sd_s: NDArray[np.float64]

    def only(self, kept: NDArray[np.bool_]) -> Trace:
        """Return the trace with only some of its points."""
        return Trace(self.frequency_hz[kept], self.time_s[kept], self.time_sd_s[kept])


@dataclass(frozen=True)
class Straightened:
    """Envelope power of de-dispersed sub-bands around the pulse.

    Parameters
    ----------
    power : ndarray, shape (bands, n)
        Envelope power over the mean noise of the sub-band.
    frequency_hz : ndarray, shape (bands,)
        Sub-band centres.
    lag_s : ndarray, shape (n,)
        Time after the curve.
    band_width_hz : float
        Equivalent width of each sub-band.
    """

    power: NDArray[np.float64]
    frequency_hz: NDArray[np.float64]
    lag_s: NDArray[np.float64]
    band_width_hz: float


def straighten(
    audio: CleanAudio,
    curve: Curve,
    *,
    band_hz: tuple[float, float],
    spacing_hz: float = SUB_BAND_HZ,
    reach_s: float = 0.15,
) -> Straightened | None:
    r"""Return the sub-band envelopes after the curve's dispersion is taken out.

    Parameters
    ----------
    audio : CleanAudio
        Cleaned block that holds the whistler.
    curve : callable
        Arrival time, s from the recording's first frame, at frequencies in Hz.
    band_hz : tuple of float
        Band to split.
    spacing_hz : float
        Distance between sub-band centres.
    reach_s : float
        Lags kept each side of the curve.

    Returns
    -------
    Straightened or None
        None when too little of the curve lies inside the block.

    Notes
    -----
    The spectrum is multiplied by :math:`\exp(+2\pi i \int (t(f) - t_0) df)`, so that energy on the
    curve arrives at lag zero (coherent de-dispersion, Hankins & Rickett 1975).
    """
    low_hz, high_hz = band_hz
    grid_hz = np.linspace(low_hz, high_hz, 400)
    arrival_s = curve(grid_hz)
    first = int((arrival_s.min() - PULSE_LEAD_S - audio.start_s) * audio.sample_rate_hz)
    last = int((arrival_s.max() + PULSE_LEAD_S - audio.start_s) * audio.sample_rate_hz)
    first, last = max(first, 0), min(last, len(audio.samples))
    if last - first < round(PULSE_LEAD_S * audio.sample_rate_hz):
        return None
    size = int(fft.next_fast_len(last - first + int(audio.sample_rate_hz), real=True))
    spectrum = fft.rfft(audio.samples[first:last], size)
    frequency_hz = np.arange(len(spectrum)) * audio.sample_rate_hz / size
    origin_s = audio.start_s + first / audio.sample_rate_hz
    # After compensation the pulse sits half a second into the (padded) window.
    delay_s = np.interp(frequency_hz, grid_hz, arrival_s) - origin_s - 0.5
    phase = 2 * np.pi * np.cumsum(delay_s) * (frequency_hz[1] - frequency_hz[0])
    spectrum = spectrum * np.exp(1j * phase)
    centres_hz = _whole(audio, curve, _centres(low_hz, high_hz, spacing_hz), spacing_hz)
    if len(centres_hz) < FEWEST_SUB_BANDS:
        return None
    return _envelopes(
        spectrum, frequency_hz, centres_hz, spacing_hz, reach_s, audio.sample_rate_hz, size
    )


def _whole(
    audio: CleanAudio, curve: Curve, centres_hz: NDArray[np.float64], spacing_hz: float
) -> NDArray[np.float64]:
    """Leave out sub-bands that the ends of the audio cut: their remains would be mistimed."""
    end_s = audio.start_s + len(audio.samples) / audio.sample_rate_hz
    low_s, high_s = (curve(np.maximum(centres_hz + k * spacing_hz, 100.0)) for k in (-0.8, 0.8))
    first_s, last_s = np.minimum(low_s, high_s), np.maximum(low_s, high_s)
    return centres_hz[(first_s > audio.start_s + EDGE_S) & (last_s < end_s - EDGE_S)]


def _centres(low_hz: float, high_hz: float, spacing_hz: float) -> NDArray[np.float64]:
    count = max(int((high_hz - low_hz) / spacing_hz), 2)
    return low_hz + (high_hz - low_hz) * (np.arange(count) + 0.5) / count


def _envelopes(
    spectrum: NDArray[np.complex128],
    frequency_hz: NDArray[np.float64],
    centres_hz: NDArray[np.float64],
    spacing_hz: float,
    reach_s: float,
    rate_hz: float,
    size: int,
) -> Straightened:
    bin_hz = frequency_hz[1]
    half = int(spacing_hz / bin_hz)
    window = np.hanning(2 * half + 1)
    out_size = int(fft.next_fast_len(4 * len(window)))
    step_s = size / rate_hz / out_size
    lag_s = step_s * np.arange(out_size) - 0.5
    near = np.abs(lag_s) <= reach_s
    noise_at = (np.abs(lag_s) > NOISE_GAP_S) & (np.abs(lag_s) < PULSE_LEAD_S)
    power = np.empty((len(centres_hz), int(near.sum())))
    for k, centre in enumerate(np.rint(centres_hz / bin_hz).astype(int)):
        piece = np.zeros(out_size, complex)
        low, high = max(centre - half, 0), min(centre + half + 1, len(spectrum))
        piece[: high - low] = (
            spectrum[low:high] * window[low - centre + half : high - centre + half]
        )
        envelope = np.abs(fft.ifft(piece)) ** 2
        noise = np.median(envelope[noise_at]) / LN2
        power[k] = envelope[near] / max(noise, np.finfo(float).tiny)
    # Equivalent width of a squared Hann window of half-width `spacing`: 3/4 of the spacing.
    return Straightened(power, centres_hz, lag_s[near], 0.75 * spacing_hz)


@dataclass(frozen=True)
class TraceReading:
    """A trace with what was seen while reading it.

    Parameters
    ----------
    trace : Trace
        The points.
    snr : ndarray, shape (n,)
        Peak power of each timed sub-band over its noise.
    thickness_s : float
        RMS thickness of the trace in time, beyond the sub-bands' own resolution.
    centre_share_sd : float
        One-sigma of where the trace is taken to be within its thickness, common to all points, as
        a share of the travel time.
    """

    trace: Trace
    snr: NDArray[np.float64]
    thickness_s: float
    centre_share_sd: float = 0.0


def read_trace(
    view: Straightened, curve: Curve, *, window_s: float, thickness_s: float | None = None
) -> TraceReading | None:
    """Return the times of the sub-bands that rise above the noise near the curve.

    Parameters
    ----------
    view : Straightened
        De-dispersed envelopes.
    curve : callable
        The curve they were de-dispersed with.
    window_s : float
        Largest lag accepted.
    thickness_s : float, optional
        RMS thickness of the trace, when it is known to be wide; by default the stacked pulse tells.

    Returns
    -------
    TraceReading or None
        None when fewer than four sub-bands stand out.
    """
    step_s = view.lag_s[1] - view.lag_s[0]
    if thickness_s is None:
        thickness_s = _thickness(view, window_s)
    resolution_s = 0.6 / view.band_width_hz  # rms width of the squared Hann pulse, about
    kernel_s = np.hypot(thickness_s, 0.3 * resolution_s)
    smooth = ndimage.gaussian_filter1d(view.power, kernel_s / step_s, axis=1, mode="nearest")
    inside = np.abs(view.lag_s) <= window_s
    part = smooth[:, inside]
    at = np.argmax(part, axis=1)
    peak = part[np.arange(len(part)), at]
    edge = (at == 0) | (at == part.shape[1] - 1)
    lag = view.lag_s[inside][at] + peak_offset(part, at) * step_s
    independent = 1.0 + np.sqrt(4 * np.pi) * kernel_s * view.band_width_hz
    # Averaging over the thickness lowers the chance peaks: the same margin in sigmas of the mean.
    needed = 1.0 + (LEAST_SNR - 1.0) / np.sqrt(independent)
    kept = (peak >= needed) & ~edge
    if kept.sum() < 4:
        return None
    sd_s = _timing_sd(peak[kept] - 1.0, thickness_s, view.band_width_hz)
    frequency_hz = view.frequency_hz[kept]
    trace = Trace(frequency_hz, curve(frequency_hz) + lag[kept], sd_s)
    return TraceReading(trace, peak[kept], thickness_s)


def peak_offset(part: NDArray[np.float64], at: NDArray[np.int64]) -> NDArray[np.float64]:
    """Return where a parabola through each row's peak and its neighbours has its top.

    Parameters
    ----------
    part : ndarray, shape (rows, n)
        Sampled curves.
    at : ndarray, shape (rows,)
        Place of each one's largest sample.

    Returns
    -------
    ndarray, shape (rows,)
        Offset from that sample, -0.5 to 0.5 samples.
    """
    rows = np.arange(len(part))
    middle = np.clip(at, 1, part.shape[1] - 2)
    left, centre, right = (part[rows, middle + k] for k in (-1, 0, 1))
    bend = left - 2 * centre + right
    return np.where(bend < 0, 0.5 * (left - right) / np.where(bend < 0, bend, 1.0), 0.0)


def coarse_thickness(view: Straightened) -> float:
    """Return the RMS thickness seen at a resolution of a few ms; 0 for a thin trace.

    Parameters
    ----------
    view : Straightened
        De-dispersed envelopes over a wide range of lags.

    Returns
    -------
    float
        Sigma of the stacked pulse, s, beyond the smoothing; the speckle inside it is averaged out.
    """
    step_s = view.lag_s[1] - view.lag_s[0]
    stack = np.minimum(view.power, STACK_CLIP).mean(axis=0)
    stack = ndimage.gaussian_filter1d(stack, COARSE_S / step_s, mode="nearest")
    sigma_s = _half_width(stack - np.percentile(stack, 20.0), step_s)
    return float(np.sqrt(max(sigma_s**2 - 1.5 * COARSE_S**2, 0.0)))


def _half_width(excess: NDArray[np.float64], step_s: float) -> float:
    """Half-power width of the highest peak, as the sigma of a Gaussian."""
    centre = int(np.argmax(excess))
    half = 0.5 * excess[centre]
    low = int(np.argmax(excess[centre::-1] < half))
    high = int(np.argmax(excess[centre:] < half))
    low = low if low > 0 else centre
    high = high if high > 0 else len(excess) - 1 - centre
    return (low + high - 1) * step_s / 2.355


def _thickness(view: Straightened, window_s: float) -> float:
    """RMS width of the stacked pulse beyond the resolution of the sub-bands."""
    inside = np.abs(view.lag_s) <= window_s
    top = view.power[:, inside].max(axis=1)
    strong = top >= LEAST_SNR
    if not strong.any():
        return 0.0
    stack = (view.power[strong] / top[strong, None]).mean(axis=0)
    base = float(np.median(stack[~inside])) if (~inside).any() else 0.0
    excess = np.where(inside, stack - base, -np.inf)
    sigma_s = _half_width(excess, view.lag_s[1] - view.lag_s[0])
    own_s = HANN_PULSE_WIDTH * 0.75 / view.band_width_hz / 2.355
    return float(np.sqrt(max(sigma_s**2 - own_s**2, 0.0)))


def _timing_sd(
    snr: NDArray[np.float64], thickness_s: float, band_width_hz: float
) -> NDArray[np.float64]:
    """One-sigma of the pulse times: noise, and the speckle of a thick trace."""
    noise_s = TIMING_FACTOR / (band_width_hz * np.sqrt(2.0 * np.maximum(snr, 0.5)))
    speckle = 1.0 + 2.0 * thickness_s * band_width_hz
    sd_s = np.hypot(noise_s * np.sqrt(speckle), thickness_s / np.sqrt(speckle))
    return np.asarray(sd_s + LEAST_SD_S)


def median_snr_db(spectrogram: Spectrogram, trace: Trace, *, curve: Curve) -> float:
    """Return the median strength of the ridge, dB over the noise, over the trace's band.

    Parameters
    ----------
    spectrogram : Spectrogram
        Normalised power.
    trace : Trace
        Gives the band.
    curve : callable
        Arrival time at frequencies in Hz.

    Returns
    -------
    float
        Ridge power in a 21.3 ms Hann cell over the mean noise there; NaN when nothing is inside.
    """
    channel_hz, power = spectrogram.frequency_hz, spectrogram.power
    inside = (channel_hz >= trace.frequency_hz.min()) & (channel_hz <= trace.frequency_hz.max())
    frame = np.rint((curve(channel_hz[inside]) - spectrogram.start_s) / spectrogram.hop_s)
    at = frame.astype(int)
    valid = (at >= 1) & (at < power.shape[1] - 1)
    if not valid.any():
        return float("nan")
    channels = np.flatnonzero(inside)[valid]
    ridge = np.maximum.reduce([power[channels, at[valid] + k] for k in (-1, 0, 1)])
    # The largest of three overlapping cells of pure noise averages about 1.5; take that out.
    return float(10 * np.log10(max(np.median(ridge) - 0.5, 1e-3)))
