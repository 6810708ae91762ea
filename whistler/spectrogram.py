"""Power against frequency and time, in units of the noise there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from whistler.cleaning import CleanAudio

WINDOW_S = 0.0213  # within 0.1 dB of chirp-matched cells for L 2.5-4 over 1-10 kHz
HOP_S = 0.004
NOISE_QUANTILE = 0.35
QUANTILE_LEVEL = -float(np.log1p(-NOISE_QUANTILE))  # of exponential power of unit mean


@dataclass(frozen=True)
class Spectrogram:
    """Hann spectrogram normalised to unit mean noise in every channel.

    Parameters
    ----------
    power : ndarray, shape (channels, frames), float32
        Power over the mean noise power of the channel and the frame.
    frequency_hz : ndarray, shape (channels,)
        Channel centres, ascending.
    start_s : float
        Centre of the first frame, from the recording's first frame.
    hop_s : float
        Step between frames.
    window_s : float
        Length of the Hann window.
    """

    power: NDArray[np.float32]
    frequency_hz: NDArray[np.float64]
    start_s: float
    hop_s: float
    window_s: float

    @property
    def time_s(self) -> NDArray[np.float64]:
        """Frame centres, shape (frames,), from the recording's first frame."""
        return np.asarray(self.start_s + self.hop_s * np.arange(self.power.shape[1]), np.float64)


def spectrogram(audio: CleanAudio, *, band_low_hz: float = 300.0) -> Spectrogram:
    """Return the normalised spectrogram of cleaned audio.

    Parameters
    ----------
    audio : CleanAudio
        Output of :func:`whistler.cleaning.clean`.
    band_low_hz : float
        Lowest channel kept.

    Returns
    -------
    Spectrogram
        Channels from `band_low_hz` to the audio's upper band edge.

    Notes
    -----
    The noise of a channel is a low quantile over the block, divided by that of unit-mean
    exponential power; each frame is then divided by its own over the channels, which takes out
    broadband residue: sferic tails, blanked samples, hiss that comes and goes. The quantile lies
    below the median, so that crowded whistlers do not raise the noise they are measured against.
    """
    rate = audio.sample_rate_hz
    size = 2 * round(WINDOW_S * rate / 2)
    hop = round(HOP_S * rate)
    samples = audio.samples
    if len(samples) < size:
        samples = np.pad(samples, (0, size - len(samples)))
    frequency_hz = np.arange(size // 2 + 1) * rate / size
    kept = np.flatnonzero((frequency_hz >= band_low_hz) & (frequency_hz <= audio.band_high_hz))
    power = _frame_power(samples, size, hop, slice(int(kept[0]), int(kept[-1]) + 1))
    return Spectrogram(
        power=_normalise(power),
        frequency_hz=frequency_hz[kept],
        start_s=audio.start_s + 0.5 * size / rate,
        hop_s=hop / rate,
        window_s=size / rate,
    )


def _frame_power(
    samples: NDArray[np.float32], size: int, hop: int, channels: slice
) -> NDArray[np.float32]:
    """Power of each Hann frame, shape (channels, frames)."""
    window = np.hanning(size + 1)[:size].astype(np.float32)
    frames = np.lib.stride_tricks.sliding_window_view(samples, size)[::hop]
    count = channels.stop - channels.start
    power = np.empty((count, len(frames)), np.float32)
    for k in range(0, len(frames), 2048):  # bounded memory, cache-sized batches
        spectra = fft.rfft(frames[k : k + 2048] * window, axis=1)[:, channels]
        power[:, k : k + 2048] = (spectra.real**2 + spectra.imag**2).T
    return power


def _normalise(power: NDArray[np.float32]) -> NDArray[np.float32]:
    alive = power.max(axis=0) > 0.0
    if not alive.any():
        return np.ones_like(power)
    step = max(1, int(alive.sum()) // 8000)
    channel = np.quantile(power[:, alive][:, ::step], NOISE_QUANTILE, axis=1) / QUANTILE_LEVEL
    power /= np.maximum(channel, channel.max() * 1e-6)[:, None].astype(np.float32)
    frame = np.quantile(power, NOISE_QUANTILE, axis=0) / QUANTILE_LEVEL
    power /= np.maximum(frame, 0.05).astype(np.float32)  # a fully blanked frame stays near zero
    return power
