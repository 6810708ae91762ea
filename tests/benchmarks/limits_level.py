"""Whether rendered whistlers have the strength they should, read off with another transform."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from promises import Figure
from scipy import signal

from whistler.synthesis.level import CELL_S
from whistler.synthesis.parts import Receiver
from whistler.synthesis.render import render
from whistler.synthesis.scene import Scene
from whistler.synthesis.truth import WhistlerTruth

HOPS_IN_CELL = 16
# Nothing clips and rounding is far below the noise.
OPEN_RECEIVER = Receiver(full_scale=1e5, bits=24)


@dataclass(frozen=True)
class Level:
    """Strength of one rendered whistler read off afresh, over two kinds of noise, beside its truth.

    `quiet_db` counts the noise of the same scene without sferics and hum, by its mean power.
    """

    wanted_db: float
    measured_db: float
    quiet_db: float


def levels(scene: Scene) -> list[Level]:
    """Every whistler of a scene, none of which may overlap another, measured by scipy's STFT."""
    silent = tuple(replace(stroke, sferic_strength=0.0) for stroke in scene.strokes)
    scene = replace(scene, strokes=silent, receiver=OPEN_RECEIVER)
    whole = render(scene)
    background = render(replace(scene, strokes=())).samples.astype(np.float64)
    quiet = render(replace(scene, strokes=(), sferics=(), mains=None)).samples
    size = round(CELL_S * scene.sample_rate_hz) // 2 * 2
    frequency, time, cells = _cells(whole.samples - background, size, scene.sample_rate_hz)
    power = np.abs(cells) ** 2
    background_power = np.abs(_cells(background, size, scene.sample_rate_hz)[2]) ** 2
    noise = np.median(background_power, axis=1) / np.log(2.0)
    quiet_noise = np.mean(np.abs(_cells(quiet, size, scene.sample_rate_hz)[2]) ** 2, axis=1)
    return [
        Level(
            truth.snr_db,
            _ridge_db(power / noise[:, None], frequency, time, truth),
            _ridge_db(power / quiet_noise[:, None], frequency, time, truth),
        )
        for truth in whole.truth.whistlers
    ]


def level_figures(scenes: list[Scene]) -> list[Figure]:
    """How far the strength of rendered whistlers is from the one asked for."""
    read = [level for scene in scenes for level in levels(scene)]
    error_db = np.array([level.measured_db - level.wanted_db for level in read])
    quiet_db = np.array([level.quiet_db - level.wanted_db for level in read])
    return [
        Figure(
            f"rendered strength less the one asked for, largest of {len(read)}",
            float(np.abs(error_db).max()),
            high=0.5,
            unit="dB",
        ),
        Figure("the same, median", float(np.median(error_db)), unit="dB"),
        Figure(
            "strength over the noise without sferics and hum, less the one asked for, median",
            float(np.median(quiet_db)),
            unit="dB",
        ),
    ]


def _cells(
    samples: np.ndarray, size: int, sample_rate_hz: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    overlap = size - size // HOPS_IN_CELL
    return signal.stft(samples, sample_rate_hz, "hann", nperseg=size, noverlap=overlap)


def _ridge_db(
    ratio: np.ndarray, frequency_hz: np.ndarray, time_s: np.ndarray, truth: WhistlerTruth
) -> float:
    """Median over the band of signal over noise in the cells nearest the true arrival."""
    inside = np.flatnonzero(
        (frequency_hz >= truth.frequency_low_hz) & (frequency_hz <= truth.frequency_high_hz)
    )
    arrival_s = np.interp(frequency_hz[inside], truth.trace.frequency_hz, truth.trace.time_s)
    step_s = time_s[1] - time_s[0]
    frame = np.round((arrival_s - time_s[0]) / step_s).astype(int)
    return float(10.0 * np.log10(np.median(ratio[inside, frame])))
