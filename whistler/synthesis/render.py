"""From a scene to samples and truth."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fieldlines.constants import EARTH_RADIUS_M, SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.synthesis.level import NoiseLevel, cell_snr, noise_level
from whistler.synthesis.mains import mains_hum
from whistler.synthesis.noise import hiss_noise, stationary_noise
from whistler.synthesis.parts import Receiver, Sferics
from whistler.synthesis.scene import Scene
from whistler.synthesis.sferics import (
    Band,
    draw_arrivals,
    draw_discharge,
    draw_spectra,
    place_one,
    place_pulses,
    pulse_spectrum,
)
from whistler.synthesis.strokes import Stroke
from whistler.synthesis.tones import chorus_elements, transmitter_signal
from whistler.synthesis.truth import TraceTruth, Truth, WhistlerTruth
from whistler.synthesis.wave import HopWave, Ray, hop_wave, prepare_ray, require_band
from whistler.synthesis.waveguide import Guide

#: Nominal distance of a stroke beside the receiver (even hops), m.
NEAR_STROKE_M = 150e3
#: Automatic gain leaves the strongest sample this far below full scale.
HEADROOM = 10.0 ** (-1.0 / 20.0)
#: Points of a true trace.
TRACE_POINTS = 100


@dataclass(frozen=True)
class SyntheticRecording:
    """Samples with what is true about them.

    Parameters
    ----------
    samples : ndarray of float32, shape (n,)
        Full scale is 1; already rounded to the receiver's word length.
    sample_rate_hz : int
        Sampling rate.
    truth : Truth
        What is in it.
    """

    samples: npt.NDArray[np.float32]
    sample_rate_hz: int
    truth: Truth


@dataclass(frozen=True)
class Background:
    """Everything but the strokes with whistlers.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        Noise units.
    sferic_count : int
        Sferics in it.
    """

    samples: FloatArray
    sferic_count: int


@dataclass(frozen=True)
class Sounding:
    """A background with strokes and whistlers in it.

    Parameters
    ----------
    samples : ndarray, shape (n,)
        Noise units.
    whistlers : tuple of WhistlerTruth
        In order of stroke, path and hop.
    """

    samples: FloatArray
    whistlers: tuple[WhistlerTruth, ...]


def render(scene: Scene, generator: np.random.Generator | None = None) -> SyntheticRecording:
    """Return the recording a scene describes.

    Parameters
    ----------
    scene : Scene
        What to render.
    generator : numpy.random.Generator or None
        Source of all draws; None starts one from the scene's seed. It is only spawned from: give a
        fresh one for the same samples.

    Returns
    -------
    SyntheticRecording
        Samples and truth; the same bytes for the same scene and generator.

    Examples
    --------
    >>> recording = render(Scene(duration_s=1.0, sample_rate_hz=16000, seed=3))
    >>> recording.samples.shape, len(recording.truth.whistlers)
    ((16000,), 0)
    """
    source = np.random.default_rng(scene.seed) if generator is None else generator
    background_source, *stroke_sources = source.spawn(1 + len(scene.strokes))
    background = render_background(scene, background_source)
    noise = noise_level(background.samples, sample_rate_hz=scene.sample_rate_hz)
    sounding = add_strokes(background.samples, scene, noise=noise, sources=stroke_sources)
    heard, full_scale = _receive(sounding.samples, scene.receiver, scene.sample_rate_hz)
    truth = Truth(
        scene=scene.to_dict(),
        duration_s=scene.frame_count / scene.sample_rate_hz,
        sample_rate_hz=scene.sample_rate_hz,
        full_scale=full_scale,
        sferic_count=background.sferic_count,
        whistlers=sounding.whistlers,
    )
    return SyntheticRecording(heard, scene.sample_rate_hz, truth)


def scene_band(scene: Scene) -> Band:
    """Return the pass band of a scene's receiver."""
    return Band(float(scene.sample_rate_hz), scene.receiver.low_cut_hz)


def render_background(scene: Scene, generator: np.random.Generator) -> Background:
    """Return everything in a scene but the strokes with whistlers.

    Parameters
    ----------
    scene : Scene
        The scene.
    generator : numpy.random.Generator
        Source of the draws; each part has a stream of its own.

    Returns
    -------
    Background
        Samples, noise units.
    """
    band, count = scene_band(scene), scene.frame_count
    kinds = ("noise", "mains", "sferics", "hiss", "chorus", "transmitters")
    source = dict(zip(kinds, generator.spawn(len(kinds)), strict=True))
    total = stationary_noise(scene.noise, source["noise"], band=band, frame_count=count)
    if scene.mains is not None:
        total += mains_hum(scene.mains, source["mains"], band=band, frame_count=count).samples
    for hiss in scene.hiss:
        total += hiss_noise(hiss, source["hiss"], band=band, frame_count=count)
    for chorus in scene.chorus:
        total += chorus_elements(chorus, source["chorus"], band=band, frame_count=count)
    for transmitter in scene.transmitters:
        total += transmitter_signal(
            transmitter, source["transmitters"], band=band, frame_count=count
        )
    sferic_count = 0
    for sferics in scene.sferics:
        arrivals = draw_arrivals(sferics, source["sferics"], duration_s=scene.duration_s)
        spectra = draw_spectra(sferics, source["sferics"], band=band)
        total += place_pulses(spectra, arrivals, band=band, frame_count=count)
        sferic_count += arrivals.time_s.size
    return Background(total, sferic_count)


def sferic_distance(stroke: Stroke) -> float:
    r"""Return how far a stroke's sferic runs to the receiver, m.

    Parameters
    ----------
    stroke : Stroke
        The stroke.

    Returns
    -------
    float
        For odd hops :math:`2 \bar\Lambda R_E` with :math:`\cos^2\Lambda = 1/L` averaged over L of
        the paths: the receiver is taken to stand at the near foot, the stroke at the conjugate
        foot. For even hops the stroke is near the receiver. The stroke's own offset is added.

    Examples
    --------
    >>> from whistler.synthesis.strokes import Path
    >>> f"{sferic_distance(Stroke(0.0, (Path(3.0, 900.0),))) / 1e3:.0f} km"
    '12173 km'
    """
    if stroke.paths[0].hops[0] % 2 == 0:
        return max(NEAR_STROKE_M + stroke.distance_offset_m, 20e3)
    mean_l = float(np.mean([path.l_value for path in stroke.paths]))
    latitude = float(np.arccos(np.sqrt(1.0 / mean_l)))
    return max(2.0 * latitude * EARTH_RADIUS_M + stroke.distance_offset_m, 20e3)


def add_strokes(
    background: FloatArray,
    scene: Scene,
    *,
    noise: NoiseLevel,
    sources: Sequence[np.random.Generator],
) -> Sounding:
    """Return a background with the strokes of a scene and all their whistlers added.

    Parameters
    ----------
    background : ndarray, shape (n,)
        Any audio of the scene's length and rate, noise units; left as it is.
    scene : Scene
        Strokes, medium, receiver, and in its first sferics the scale of the strokes' own.
    noise : NoiseLevel
        What the strengths refer to, in the same units.
    sources : sequence of numpy.random.Generator
        One for each stroke.

    Returns
    -------
    Sounding
        A new array, and what is true about it.
    """
    samples = background.copy()
    whistlers: list[WhistlerTruth] = []
    for number, (stroke, one) in enumerate(zip(scene.strokes, sources, strict=True), 1):
        whistlers += _add_stroke(samples, scene, stroke, number, noise, one)
    return Sounding(samples, tuple(whistlers))


def _add_stroke(
    samples: FloatArray,
    scene: Scene,
    stroke: Stroke,
    number: int,
    noise: NoiseLevel,
    generator: np.random.Generator,
) -> list[WhistlerTruth]:
    """Add a stroke's sferic and all its whistlers to the samples; return their truth."""
    sferic_source, wave_source = generator.spawn(2)
    sferic_time_s = stroke.lightning_time_s + sferic_distance(stroke) / SPEED_OF_LIGHT_M_S
    peak = _add_sferic(samples, scene, stroke, sferic_time_s, sferic_source)
    band, model = scene_band(scene), scene.medium.field_line_model()
    truths = []
    for path in stroke.paths:
        ray = prepare_ray(path, model=model)
        require_band(path, high_hz=ray.high_hz, limit_hz=0.47 * scene.sample_rate_hz)
        for hops in path.hops:
            wave = hop_wave(
                ray,
                wave_source,
                hops=hops,
                lightning_time_s=stroke.lightning_time_s,
                band=band,
            )
            truth = _truth(scene, stroke, ray, number, hops, sferic_time_s, peak)
            scale = _scale(wave, truth, noise, scene.sample_rate_hz)
            _add_wave(samples, wave, scale)
            truths.append(truth)
    return truths


def _add_sferic(
    samples: FloatArray,
    scene: Scene,
    stroke: Stroke,
    time_s: float,
    generator: np.random.Generator,
) -> float:
    reference = scene.sferics[0] if scene.sferics else Sferics(median_peak=1.0)
    peak = stroke.sferic_strength * reference.median_peak
    band = scene_band(scene)
    spectrum = pulse_spectrum(
        band,
        distance_m=sferic_distance(stroke),
        guide=Guide(reference.reflection_height_m, reference.tweek_db),
        discharge=draw_discharge(generator),
    )
    samples += place_one(
        spectrum, time_s=time_s, peak=peak, band=band, frame_count=scene.frame_count
    )
    return peak


def _truth(
    scene: Scene,
    stroke: Stroke,
    ray: Ray,
    number: int,
    hops: int,
    sferic_time_s: float,
    peak: float,
) -> WhistlerTruth:
    path = ray.path
    frequency = np.geomspace(ray.low_hz, ray.high_hz, TRACE_POINTS)
    time_s = stroke.lightning_time_s + hops * ray.phase.group_delay(frequency)
    return WhistlerTruth(
        group=number,
        hops=hops,
        l_value=path.l_value,
        equatorial_density_cm3=path.equatorial_density_cm3,
        lightning_time_s=stroke.lightning_time_s,
        sferic_time_s=sferic_time_s,
        sferic_seen=peak > 0.0,
        sferic_peak=peak,
        snr_db=path.snr_db - path.hop_loss_db * (hops - path.hops[0]),
        frequency_low_hz=ray.low_hz,
        frequency_high_hz=ray.high_hz,
        spread_s=hops * path.spread_s,
        equatorial_gyrofrequency_hz=ray.equatorial_gyrofrequency_hz,
        complete=bool(time_s.max() < scene.duration_s and time_s.min() > 0.0),
        trace=TraceTruth(frequency, time_s),
    )


def _scale(wave: HopWave, truth: WhistlerTruth, noise: NoiseLevel, sample_rate_hz: float) -> float:
    """Factor that gives the wave its cell SNR."""
    inside = (noise.frequency_hz >= truth.frequency_low_hz) & (
        noise.frequency_hz <= truth.frequency_high_hz
    )
    channels = np.flatnonzero(inside)
    frequency = noise.frequency_hz[channels]
    order = np.interp(frequency, truth.trace.frequency_hz, truth.trace.time_s)
    unit = cell_snr(
        wave.samples,
        arrival_s=order - wave.first_frame / sample_rate_hz,
        channels=channels,
        noise=noise,
        sample_rate_hz=sample_rate_hz,
    )
    return float(10.0 ** (truth.snr_db / 20.0) / np.sqrt(unit))


def _add_wave(samples: FloatArray, wave: HopWave, scale: float) -> None:
    begin = max(wave.first_frame, 0)
    end = min(wave.first_frame + wave.samples.size, samples.size)
    if end > begin:
        part = wave.samples[begin - wave.first_frame : end - wave.first_frame]
        samples[begin:end] += scale * part


def _receive(
    samples: FloatArray, receiver: Receiver, sample_rate_hz: float
) -> tuple[npt.NDArray[np.float32], float]:
    """Gain, clipping, rounding and dropouts; also the amplitude of full scale."""
    full_scale = receiver.full_scale or float(np.abs(samples).max()) / HEADROOM
    steps = 2.0 ** (receiver.bits - 1)
    whole = np.clip(np.round(samples / full_scale * steps), -steps, steps - 1.0)
    heard = (whole / steps).astype(np.float32)
    for dropout in receiver.dropouts:
        first = int(dropout.start_s * sample_rate_hz)
        heard[first : first + int(dropout.duration_s * sample_rate_hz)] = np.nan
    return heard, full_scale
