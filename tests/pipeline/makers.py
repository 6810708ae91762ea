"""Small makers of the pipeline's inputs, with every number known."""

from __future__ import annotations

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
