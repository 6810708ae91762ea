"""Small makers of the pipeline's inputs, with every number known."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from fieldlines import FieldLineModel, travel_time
from whistler.cleaning import CleanAudio
from whistler.recording import AudioBlock
from whistler.sferic import SfericCatalogue
from whistler.trace import Trace

RATE_HZ = 24_000.0
NO_SFERICS = SfericCatalogue(np.empty(0), np.empty(0), 0.0)


def block(samples: np.ndarray, rate_hz: int, usable: np.ndarray | None = None) -> AudioBlock:
    """A block from the recording's beginning."""
    if usable is None:
        usable = np.ones(len(samples), bool)
    return AudioBlock(0, samples.astype(np.float32), usable, rate_hz)


def clean_audio(samples: np.ndarray, *, start_s: float = 0.0) -> CleanAudio:
    """Samples taken to be clean already."""
    return CleanAudio(
        samples=samples.astype(np.float32),
        blanked=np.zeros(len(samples), bool),
        sample_rate_hz=RATE_HZ,
        start_s=start_s,
        band_high_hz=10_000.0,
        sferics=NO_SFERICS,
        mains_hz=float("nan"),
    )


def model_trace(
    model: FieldLineModel,
    *,
    l_value: float,
    density_m3: float,
    band_hz: tuple[float, float],
    count: int = 25,
    sd_s: float = 0.001,
    hops: int = 1,
    lightning_time_s: float = 0.0,
    generator: np.random.Generator | None = None,
) -> Trace:
    """Points on a model curve, scattered by their sigma when there is a generator."""
    frequency_hz = np.linspace(*band_hz, count)
    time_s = lightning_time_s + hops * travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )
    if generator is not None:
        time_s = time_s + sd_s * generator.standard_normal(count)
    return Trace(frequency_hz, time_s, np.full(count, sd_s))


def dispersed(
    delay_s: Callable[[np.ndarray], np.ndarray],
    *,
    band_hz: tuple[float, float],
    duration_s: float,
    shares: np.ndarray | None = None,
    generator: np.random.Generator | None = None,
) -> np.ndarray:
    """A flat-spectrum wave that arrives at `delay_s(f)`, from its phase: -2 pi times the integral.

    With `shares`, a bundle of waves, each later by that share of its delay and of random strength.
    """
    count = round(duration_s * RATE_HZ)
    frequency_hz = np.fft.rfftfreq(count, 1.0 / RATE_HZ)
    nodes_hz = np.linspace(*band_hz, 2000)
    arrival_s = np.interp(frequency_hz, nodes_hz, delay_s(nodes_hz))
    phase = -2 * np.pi * np.cumsum(arrival_s) * frequency_hz[1]
    inside = (frequency_hz >= band_hz[0]) & (frequency_hz <= band_hz[1])
    if shares is None or generator is None:
        return np.fft.irfft(inside * np.exp(1j * phase), count)
    strength = generator.standard_normal((2, len(shares))) / np.sqrt(2.0 * len(shares))
    waves = (
        (a + 1j * b) * np.exp(1j * phase * (1.0 + share))
        for a, b, share in zip(*strength, shares, strict=True)
    )
    return np.fft.irfft(inside * sum(waves), count)


def in_noise(wave: np.ndarray, *, cell_snr_db: float, generator: np.random.Generator) -> CleanAudio:
    """A wave in white noise: strongest cell of each 21.3 ms Hann channel, median over channels."""
    window = np.hanning(512)
    frames = np.lib.stride_tricks.sliding_window_view(wave, 512)[::48]
    power = np.abs(np.fft.rfft(frames * window, axis=1)) ** 2
    ridge = power.max(axis=0)
    ridge = np.median(ridge[ridge > 0.01 * ridge.max()])  # in the band of the wave
    scale = np.sqrt(10 ** (cell_snr_db / 10) * np.sum(window**2) / ridge)
    return clean_audio(scale * wave + generator.standard_normal(len(wave)))
