"""Whitened, hum-free, sferic-blanked audio: what every later stage looks at.

Order of work: band-limit and take out the mains harmonics in long Hann-windowed transforms;
whiten by the median spectrum; mark the sferics in the time domain, keep them as a catalogue,
blank them. Nothing downstream sees the original audio.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

from whistler.recording import AudioBlock
from whistler.settings import Settings
from whistler.sferic import SfericCatalogue, catalogue_sferics

ANALYSIS_RATE_HZ = 24_000.0  # band to 12 kHz; lower input rates are kept as they are
TRANSFORM_S = 1.365  # 0.73 Hz resolution, and mains drift stays inside a bin or two
WHITENING_WINDOW_S = 0.0213
HUM_TOP_HZ = 3000.0
HUM_TOLERANCE = 0.004  # the grid is held to 0.2 Hz of 50 Hz in ordinary times (common practice)
HUM_EXCESS = 6.0  # a line is taken out where it stands this far above its surroundings
LN2 = float(np.log(2.0))  # median of unit-mean exponential power


@dataclass(frozen=True)
class CleanAudio:
    """Whitened audio of one block, with its sferics blanked and listed.

    Parameters
    ----------
    samples : ndarray, shape (n,), float32
        Whitened samples, unit robust variance, zero where blanked.
    blanked : ndarray, shape (n,), bool
        Samples set to zero: sferics with their guard, and unusable input.
    sample_rate_hz : float
        Rate of `samples`; an exact rational of the recording's own rate.
    start_s : float
        Time of the first sample, from the recording's first frame.
    band_high_hz : float
        Upper edge of the band that the audio carries.
    sferics : SfericCatalogue
        Sferics in this block, times from the recording's first frame.
    mains_hz : float
        Mains frequency found; NaN when no comb stands out.
    """

    samples: NDArray[np.float32]
    blanked: NDArray[np.bool_]
    sample_rate_hz: float
    start_s: float
    band_high_hz: float
    sferics: SfericCatalogue
    mains_hz: float


@dataclass(frozen=True)
class _BandPlan:
    """Sizes of the long transforms: `size_in` input samples become `size_out` analysis samples."""

    size_in: int
    size_out: int
    input_rate_hz: float

    @property
    def rate_hz(self) -> float:
        return self.input_rate_hz * self.size_out / self.size_in

    @property
    def bin_hz(self) -> float:
        return self.input_rate_hz / self.size_in


def _plan(sample_rate_hz: float) -> _BandPlan:
    size_in = 4 * int(fft.next_fast_len(round(TRANSFORM_S * sample_rate_hz / 4), real=True))
    wanted = round(size_in * ANALYSIS_RATE_HZ / sample_rate_hz / 4)
    size_out = min(4 * int(fft.next_fast_len(wanted, real=True)), size_in)
    return _BandPlan(size_in, size_out, sample_rate_hz)


def clean(block: AudioBlock, *, settings: Settings) -> CleanAudio:
    """Return the whitened, hum-free, sferic-blanked form of one block of audio.

    Parameters
    ----------
    block : AudioBlock
        Audio at any scale; at least one transform (1.4 s) is padded to.
    settings : Settings
        Mains frequency and analysed band.

    Returns
    -------
    CleanAudio
        The block as the search and the tracing see it.
    """
    plan = _plan(float(block.sample_rate_hz))
    start_s = block.first_frame / block.sample_rate_hz
    audio, mains_hz = _band_limit(block.samples, plan, settings)
    missing = _missing_at(block.usable, len(audio), plan)
    whitened = _whiten(audio, ~missing, plan.rate_hz, settings)
    sferics, marked = catalogue_sferics(
        whitened,
        sample_rate_hz=plan.rate_hz,
        front_hz=1.1 * _top_hz(plan.rate_hz, settings),
    )
    blanked = marked | missing
    quiet = np.where(blanked, np.float32(0.0), whitened).astype(np.float32)
    return CleanAudio(
        samples=quiet,
        blanked=blanked,
        sample_rate_hz=plan.rate_hz,
        start_s=start_s,
        band_high_hz=_top_hz(plan.rate_hz, settings),
        sferics=sferics.shifted(start_s),
        mains_hz=mains_hz,
    )


def without_mains(block: AudioBlock, *, settings: Settings) -> NDArray[np.float32]:
    """Return the analysed band of a block without its mains lines, at the block's own rate.

    Parameters
    ----------
    block : AudioBlock
        Audio at any scale.
    settings : Settings
        Mains frequency and analysed band.

    Returns
    -------
    ndarray, shape (n,), float32
        What :func:`clean` whitens, in the scale of the block; sferics are still in it.
    """
    rate_hz = float(block.sample_rate_hz)
    size = _plan(rate_hz).size_in
    audio, _ = _band_limit(block.samples, _BandPlan(size, size, rate_hz), settings)
    return audio


def _top_hz(rate_hz: float, settings: Settings) -> float:
    return min(settings.band_high_hz, 0.47 * rate_hz)


def _band_limit(
    samples: NDArray[np.float32], plan: _BandPlan, settings: Settings
) -> tuple[NDArray[np.float32], float]:
    """Keep the analysed band and remove the mains comb, frame by frame, overlap-adding."""
    hop_in, hop_out = plan.size_in // 2, plan.size_out // 2
    count = -(-len(samples) // hop_in) + 1
    padded = np.zeros((count + 1) * hop_in, np.float32)
    padded[hop_in : hop_in + len(samples)] = samples
    window = _periodic_hann(plan.size_in)
    keep = plan.size_out // 2 + 1
    taper = _edge_taper(keep, plan.bin_hz, _top_hz(plan.rate_hz, settings))
    out = np.zeros((count + 1) * hop_out, np.float32)
    found = []
    for k in range(count):
        frame = padded[k * hop_in : k * hop_in + plan.size_in] * window
        spectrum = fft.rfft(frame)[:keep] * taper
        found.append(_remove_mains(spectrum, plan.bin_hz, settings.station.mains_hz))
        piece = fft.irfft(spectrum, plan.size_out) * np.float32(plan.size_out / plan.size_in)
        out[k * hop_out : k * hop_out + plan.size_out] += piece
    length = round(len(samples) * plan.size_out / plan.size_in)
    seen = np.array(found)
    mains = float(np.nanmedian(seen)) if np.isfinite(seen).mean() > 0.5 else float("nan")
    return out[hop_out : hop_out + length], mains


def _periodic_hann(size: int) -> NDArray[np.float32]:
    return (0.5 - 0.5 * np.cos(2 * np.pi * np.arange(size) / size)).astype(np.float32)


def _edge_taper(count: int, bin_hz: float, top_hz: float) -> NDArray[np.float32]:
    """Pass 250 Hz to the top of the band, with half-cosine skirts that ring for under 10 ms."""
    frequency_hz = np.arange(count) * bin_hz
    rise = np.clip((frequency_hz - 150.0) / 150.0, 0.0, 1.0)
    fall = np.clip((min(1.08 * top_hz, count * bin_hz) - frequency_hz) / (0.08 * top_hz), 0.0, 1.0)
    taper = np.sin(0.5 * np.pi * rise) ** 2 * np.sin(0.5 * np.pi * fall) ** 2
    return np.asarray(taper, np.float32)


def _remove_mains(spectrum: NDArray[np.complex64], bin_hz: float, nominal_hz: float) -> float:
    """Bring mains lines down to their surroundings, in place; return the frequency found."""
    top = min(int((HUM_TOP_HZ + 30.0) / bin_hz), len(spectrum))
    power = np.abs(spectrum[:top]) ** 2
    width = 2 * round(0.4 * nominal_hz / bin_hz) + 1
    floor = (
        ndimage.percentile_filter(power[::2], 40, width // 2) / 0.51
    )  # mean of exponential power
    # Below the pass band there is nothing: a floor far below any line keeps the ratio finite.
    floor = np.repeat(floor, 2)[:top] + 1e-12 * power.max() + np.finfo(np.float32).tiny
    excess = power / floor
    harmonics = np.arange(4, int(HUM_TOP_HZ / nominal_hz) + 1)
    trials_hz = nominal_hz * (1.0 + np.linspace(-HUM_TOLERANCE, HUM_TOLERANCE, 81))
    bins = np.rint(trials_hz[:, None] * harmonics / bin_hz).astype(int)
    score = np.log1p(np.minimum(excess[bins], 1e4)).mean(axis=1)
    best = int(np.argmax(score))
    if score[best] < 1.0:  # a comb of noise alone scores 0.6
        return float("nan")
    every = np.arange(1, int(HUM_TOP_HZ / nominal_hz) + 1) * trials_hz[best] / bin_hz
    near = np.rint(every).astype(int)[:, None] + np.arange(-3, 4)
    near = near[(near >= 0) & (near < top)]
    strong = near[excess[near] > HUM_EXCESS]
    spectrum[strong] *= np.sqrt(1.0 / excess[strong]).astype(np.float32)
    return float(trials_hz[best])


def _missing_at(usable: NDArray[np.bool_], length: int, plan: _BandPlan) -> NDArray[np.bool_]:
    """Carry the unusable input samples over to the analysis rate, with 2 ms of guard."""
    missing = np.zeros(length, bool)
    bad = np.flatnonzero(~usable)
    if bad.size:
        at = np.minimum((bad * (plan.size_out / plan.size_in)).astype(int), length - 1)
        missing[at] = True
        missing = ndimage.binary_dilation(missing, iterations=round(0.002 * plan.rate_hz))
    return missing


def _whiten(
    audio: NDArray[np.float32], present: NDArray[np.bool_], rate_hz: float, settings: Settings
) -> NDArray[np.float32]:
    """Flatten the median spectrum with a zero-phase filter and scale to unit robust sigma."""
    size = 2 * round(WHITENING_WINDOW_S * rate_hz / 2)
    level = _median_level(audio, present, size)
    frequency_hz = np.arange(len(level)) * rate_hz / size
    inside = (frequency_hz >= 300.0) & (frequency_hz <= _top_hz(rate_hz, settings))
    if not inside.any() or not level[inside].max() > 0.0:
        return np.zeros_like(audio)
    level = ndimage.gaussian_filter1d(np.log(level + 1e-6 * level[inside].max()), 2.0)
    gain = np.where(inside, np.exp(-0.5 * level), 0.0)
    gain = ndimage.gaussian_filter1d(gain, 1.0)
    total = int(fft.next_fast_len(len(audio) + size, real=True))
    grid = np.arange(total // 2 + 1) * (len(level) - 1) / (total // 2)
    response = np.interp(grid, np.arange(len(level)), gain).astype(np.float32)
    white = fft.irfft(fft.rfft(audio, total) * response, total)[: len(audio)]
    heard = np.abs(white[present & (white != 0.0)][::7])
    sigma = float(np.median(heard)) / 0.6745 if len(heard) else 0.0
    return np.asarray(white / sigma if sigma > 0.0 else white * 0.0, np.float32)


def _median_level(
    audio: NDArray[np.float32], present: NDArray[np.bool_], size: int
) -> NDArray[np.float64]:
    """Median power in each channel over the frames that are there as a whole and hold a signal."""
    if len(audio) < size:
        lacking = (0, size - len(audio))
        audio, present = np.pad(audio, lacking), np.pad(present, lacking)
    frames = np.lib.stride_tricks.sliding_window_view(audio, size)[:: size // 2]
    whole = np.lib.stride_tricks.sliding_window_view(present, size)[:: size // 2].all(axis=1)
    if whole.any():
        frames = frames[whole]
    if len(frames) > 4000:  # enough for a median to 2 %; keeps long blocks cheap
        frames = frames[:: len(frames) // 4000 + 1]
    power = np.abs(fft.rfft(frames * _periodic_hann(size), axis=1)) ** 2
    alive = power.sum(axis=1) > 0.0
    if not alive.any():
        return np.zeros(size // 2 + 1)
    return np.asarray(np.median(power[alive], axis=0), np.float64)
