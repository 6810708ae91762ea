"""Synthetic whistlers of known strength put into a copy of a recording's audio.

The noise that strengths refer to is that of the recording itself, as the search hears it: mains
lines are taken out as the analysis takes them out, cells that touch a sferic (or silence) are left
out, and the median over the other cells ignores whistlers, which fill a few per cent of them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fieldlines import FieldLineModel
from fieldlines.constants import EARTH_RADIUS_M
from fieldlines.errors import FloatArray
from whistler.cleaning import CleanAudio, clean, without_mains
from whistler.clock import decimal_year
from whistler.model import receiver_latitude
from whistler.recording import AudioBlock, Recording
from whistler.recovery import Line, near
from whistler.settings import Settings
from whistler.synthesis.draw import Campaign, draw_stroke
from whistler.synthesis.level import NoiseLevel, noise_level
from whistler.synthesis.parts import Sferics
from whistler.synthesis.render import add_strokes
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Medium, Stroke
from whistler.synthesis.truth import TraceTruth, WhistlerTruth
from whistler.synthesis.wave import HIGHEST_USUAL_HZ, prepare_ray

DIFFUSE_SHARE = 0.2
DIFFUSE_SPREAD_S = (0.010, 0.025)
DIFFUSE_BAND_HZ = (700.0, 6000.0)
ONE_PATH = (1.0, 0.0, 0.0)
ONE_TRACE = (0.85, 0.15, 0.0, 0.0, 0.0)  # one hop, or two: those heard without their echoes
CARRIED = 0.44  # of the sampling rate; the highest band limit that is rendered whole
PAUSE_S = 0.3  # at least, between one whistler's last wave and the next one's stroke
FEWEST_SFERICS = 10  # that a typical strength can be told from
SFERIC_SAMPLES = 128  # around its front, that hold a sferic's peak
USUAL_PEAK = 30.0  # sferics over noise where a recording has too few to tell
TRACE_POINTS = 100


@dataclass(frozen=True)
class Surroundings:
    """What is known of a piece of audio before anything is put into it.

    Parameters
    ----------
    block : AudioBlock
        The audio.
    noise : NoiseLevel
        Noise in every channel, in units of `noise_unit` squared.
    noise_unit : float
        Robust standard deviation of the audio without mains and sferics, full scale 1; the unit of
        amplitude below.
    sferic_peak : float
        Median peak of the sferics.
    medium : Medium
        What the injected whistlers run through: the model of the fits.
    traces : sequence of Line
        What was found in the audio as it is; times from the beginning of the block.
    latitude_rad : float or None
        Geomagnetic latitude of the receiver.
    """

    block: AudioBlock
    noise: NoiseLevel
    noise_unit: float
    sferic_peak: float
    medium: Medium
    traces: Sequence[Line]
    latitude_rad: float | None


@dataclass(frozen=True)
class InjectedAudio:
    """Audio with whistlers in it.

    Parameters
    ----------
    block : AudioBlock
        A new block.
    whistlers : tuple of WhistlerTruth
        What was put in, times from the beginning of the block.
    diffuse : tuple of bool
        Which of them are of the thick kind.
    rejected : int
        Whistlers left out because a trace of the recording lies there, or silence.
    """

    block: AudioBlock
    whistlers: tuple[WhistlerTruth, ...]
    diffuse: tuple[bool, ...]
    rejected: int


@dataclass(frozen=True)
class _Draw:
    """A whistler to be put in: its stroke, and its curve after a stroke at time zero."""

    stroke: Stroke
    diffuse: bool
    line: TraceTruth

    @property
    def length_s(self) -> float:
        return float(self.line.time_s.max())

    def at(self, time_s: float) -> _Draw:
        """The same, struck at a time."""
        stroke = replace(self.stroke, lightning_time_s=time_s)
        return _Draw(
            stroke, self.diffuse, TraceTruth(self.line.frequency_hz, self.line.time_s + time_s)
        )


def surroundings(
    block: AudioBlock, recording: Recording, *, traces: Sequence[Line], settings: Settings
) -> Surroundings:
    """Return what injecting into a block needs to know of it.

    Parameters
    ----------
    block : AudioBlock
        The audio, its first sample at time zero.
    recording : Recording
        For the date.
    traces : sequence of Line
        What was found in it.
    settings : Settings
        Band, mains, model.

    Returns
    -------
    Surroundings
    """
    cleaned = clean(block, settings=settings)
    audio = without_mains(block, settings=settings).astype(float)
    left_out = _at_rate(cleaned, len(audio), block.sample_rate_hz)
    quiet = audio[~left_out]
    unit = float(np.median(np.abs(quiet))) / 0.6745 if quiet.size else 0.0
    unit = unit or 1.0  # silence: nothing will be found
    year = decimal_year(recording.start_time)
    return Surroundings(
        block=block,
        noise=noise_level(audio / unit, sample_rate_hz=block.sample_rate_hz, left_out=left_out),
        noise_unit=unit,
        sferic_peak=_usual_peak(audio / unit, cleaned.sferics.time_s * block.sample_rate_hz),
        medium=_medium(settings, decimal_year=year),
        traces=traces,
        latitude_rad=receiver_latitude(settings, decimal_year=year),
    )


def inject(
    around: Surroundings,
    generator: np.random.Generator,
    *,
    count: int,
    l_range: tuple[float, float],
    snr_range_db: tuple[float, float],
    settings: Settings,
) -> InjectedAudio:
    """Return a block with whistlers added to it, each alone in its time.

    Parameters
    ----------
    around : Surroundings
        The audio and its noise.
    generator : numpy.random.Generator
        Source of all draws.
    count : int
        How many at most; fewer when they do not fit one after another.
    l_range, snr_range_db : tuple of float
        Uniform ranges of L and of the strength, dB.
    settings : Settings
        Band.

    Returns
    -------
    InjectedAudio
        The samples outside the whistlers and their sferics are those of the recording.
    """
    block = around.block
    rate_hz = block.sample_rate_hz
    top_hz = min(HIGHEST_USUAL_HZ, settings.band_high_hz, CARRIED * rate_hz)
    thin = Campaign(
        l_range=l_range,
        snr_range_db=snr_range_db,
        offset_sd_m=0.0,
        medium=around.medium,
        path_shares=ONE_PATH,
        hop_shares=ONE_TRACE,
        high_hz=top_hz,
    )
    low_hz, high_hz = DIFFUSE_BAND_HZ
    thick = replace(
        thin,
        low_range_hz=(low_hz, low_hz),
        high_hz=min(high_hz, top_hz),
        spread_range_s=DIFFUSE_SPREAD_S,
    )
    drawn = _draw_all(generator, (thin, thick), count, around)
    spaced = _spaced(generator, drawn, duration_s=len(block.samples) / rate_hz)
    kept = [draw for draw in spaced if _free(draw, around)]
    return _rendered(around, kept, generator, rejected=len(spaced) - len(kept))


def backwards(block: AudioBlock, traces: Sequence[Line]) -> AudioBlock:
    """Return a block played backwards, without the stretches in which traces were found.

    Parameters
    ----------
    block : AudioBlock
        The audio, its first sample at time zero.
    traces : sequence of Line
        What was found in it: left in, they would raise the threshold of the search, whose own
        reference is the audio backwards once more.

    Returns
    -------
    AudioBlock
        Those stretches are zero and not usable.
    """
    usable = block.usable.copy()
    for trace in traces:
        first = int((trace.time_s.min() - PAUSE_S) * block.sample_rate_hz)
        last = int((trace.time_s.max() + PAUSE_S) * block.sample_rate_hz)
        usable[max(first, 0) : max(last, 0)] = False
    samples = np.where(usable, block.samples, np.float32(0))
    return replace(block, samples=samples[::-1].copy(), usable=usable[::-1].copy())


def _at_rate(cleaned: CleanAudio, size: int, rate_hz: float) -> NDArray[np.bool_]:
    """The blanked samples of cleaned audio, at another rate."""
    at = (np.arange(size) * (cleaned.sample_rate_hz / rate_hz)).astype(np.int64)
    return np.asarray(cleaned.blanked[np.minimum(at, len(cleaned.blanked) - 1)])


def _usual_peak(audio: FloatArray, at: FloatArray) -> float:
    """Median peak of the sferics at these samples."""
    if len(at) < FEWEST_SFERICS:
        return USUAL_PEAK
    size = min(SFERIC_SAMPLES, len(audio))
    first = np.clip(at.astype(np.int64) - size // 4, 0, len(audio) - size)
    return float(np.median(np.abs(audio[first[:, None] + np.arange(size)]).max(axis=1)))


def _medium(settings: Settings, *, decimal_year: float) -> Medium:
    """The model of the fits, in the words of the synthesis."""
    station = settings.station
    return Medium(
        decimal_year=decimal_year,
        density_exponent=settings.density_exponent,
        fo_f2_mhz=station.fo_f2_mhz,
        hm_f2_km=station.hm_f2_km,
        scale_height_km=station.scale_height_km,
    )


def _draw_all(
    generator: np.random.Generator,
    kinds: tuple[Campaign, Campaign],
    count: int,
    around: Surroundings,
) -> list[_Draw]:
    model = around.medium.field_line_model()
    drawn = []
    for _ in range(count):
        diffuse = bool(generator.random() < DIFFUSE_SHARE)
        stroke = draw_stroke(generator, campaign=kinds[diffuse], lightning_time_s=0.0)
        stroke = _heard_at(stroke, around.latitude_rad)
        drawn.append(_Draw(stroke, diffuse, _line(stroke, model)))
    return drawn


def _heard_at(stroke: Stroke, latitude_rad: float | None) -> Stroke:
    """Let the sferic of a stroke in the other hemisphere run as far as the fits expect it to."""
    path = stroke.paths[0]
    foot_rad = float(np.arccos(path.l_value**-0.5))
    if latitude_rad is None or path.hops[0] % 2 == 0 or abs(latitude_rad) >= foot_rad:
        return stroke
    return replace(stroke, distance_offset_m=2.0 * (abs(latitude_rad) - foot_rad) * EARTH_RADIUS_M)


def _line(stroke: Stroke, model: FieldLineModel) -> TraceTruth:
    """Return the curve of a stroke's one trace, from the phase that will be rendered."""
    ray = prepare_ray(stroke.paths[0], model=model)
    frequency_hz = np.geomspace(ray.low_hz, ray.high_hz, TRACE_POINTS)
    delay_s = ray.path.hops[0] * ray.phase.group_delay(frequency_hz)
    return TraceTruth(frequency_hz, stroke.lightning_time_s + delay_s)


def _spaced(
    generator: np.random.Generator, drawn: list[_Draw], *, duration_s: float
) -> list[_Draw]:
    """Place as many as fit one after another, with random pauses between them."""
    needed_s = np.cumsum([draw.length_s + PAUSE_S for draw in drawn]) + PAUSE_S
    fit = int(np.searchsorted(needed_s, duration_s))
    begins_s = np.concatenate([[PAUSE_S], needed_s])[:fit]
    spare_s = duration_s - needed_s[fit - 1] if fit else 0.0
    extra_s = np.sort(generator.uniform(0.0, spare_s, fit))
    return [
        draw.at(float(begin + extra))
        for draw, begin, extra in zip(drawn[:fit], begins_s, extra_s, strict=True)
    ]


def _free(draw: _Draw, around: Surroundings) -> bool:
    """Whether the audio is all there, and no trace of the recording could be taken for this one."""
    rate_hz = around.block.sample_rate_hz
    first = int(draw.stroke.lightning_time_s * rate_hz)
    last = int(draw.line.time_s.max() * rate_hz) + 1
    return bool(around.block.usable[first:last].all()) and not near(draw.line, around.traces)


def _rendered(
    around: Surroundings, kept: list[_Draw], generator: np.random.Generator, *, rejected: int
) -> InjectedAudio:
    block = around.block
    scene = Scene(
        duration_s=len(block.samples) / block.sample_rate_hz,
        sample_rate_hz=block.sample_rate_hz,
        seed=0,  # the draws come from the generator
        medium=around.medium,
        strokes=tuple(draw.stroke for draw in kept),
        sferics=(Sferics(median_peak=around.sferic_peak),),
    )
    silence: FloatArray = np.zeros(len(block.samples))
    added = add_strokes(silence, scene, noise=around.noise, sources=generator.spawn(len(kept)))
    wave = np.where(block.usable, around.noise_unit * added.samples, 0.0).astype(np.float32)
    return InjectedAudio(
        replace(block, samples=block.samples + wave),
        added.whistlers,
        tuple(draw.diffuse for draw in kept),
        rejected,
    )
