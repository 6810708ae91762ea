"""Whistlers put into a copy of audio: as strong as stated, and nothing else changed."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from whistler.injection import InjectedAudio, Surroundings, backwards, inject, surroundings
from whistler.pieces import Piece
from whistler.problem import sferic_path_s
from whistler.recording import AudioBlock, Recording
from whistler.settings import Settings
from whistler.station import Station
from whistler.synthesis.level import noise_level
from whistler.synthesis.parts import Mains, Noise, Sferics
from whistler.synthesis.quick import quick_scene
from whistler.synthesis.render import add_strokes, render_background
from whistler.synthesis.scene import Scene
from whistler.synthesis.truth import TraceTruth

RATE_HZ = 24_000
SCALE = 0.003  # of a noise unit in full scale: any recording's gain


def block_of(samples: np.ndarray) -> AudioBlock:
    samples = samples.astype(np.float32)
    samples.setflags(write=False)
    usable = np.ones(len(samples), bool)
    usable.setflags(write=False)
    return AudioBlock(0, samples, usable, RATE_HZ)


def around_of(block: AudioBlock, *, settings: Settings | None = None, traces=()) -> Surroundings:
    recording = Recording("made.wav", RATE_HZ, len(block.samples), 1, 1, None, "unknown")
    piece = Piece.of(recording, block)
    return surroundings(block, piece, traces=traces, settings=settings or Settings())


def injected(around: Surroundings, *, count: int = 4, seed: int = 1, snr_db=12.0) -> InjectedAudio:
    return inject(
        around,
        np.random.default_rng(seed),
        count=count,
        l_range=(2.2, 4.6),
        snr_range_db=(snr_db, snr_db + 1e-9),
        settings=Settings(),
    )


@pytest.fixture(scope="module")
def white() -> AudioBlock:
    return block_of(SCALE * np.random.default_rng(3).standard_normal(30 * RATE_HZ))


@pytest.mark.parametrize(("rate_hz", "mains", "tolerance_db"), [
    (0.0, 0.0, 0.1), (0.0, 30.0, 0.15), (20.0, 10.0, 0.2), (80.0, 10.0, 0.6),
])  # fmt: skip
def test_noise_is_what_lies_under_sferics_hum_and_whistlers(
    rate_hz: float, mains: float, tolerance_db: float
) -> None:
    """Recovery: the noise alone, rendered from the same draws, is the truth. Tolerances: scatter of
    a median over some 200 quiet cells, and what of the tails of sferics stays below notice."""
    scene = Scene(
        duration_s=25.0,
        sample_rate_hz=RATE_HZ,
        seed=1,
        noise=Noise(atmospheric_db=8.0),
        sferics=(Sferics(rate_hz=rate_hz),),
        mains=Mains(level=mains, harmonics=40),
    )
    quiet = replace(scene, sferics=(), mains=None)
    noise = render_background(quiet, np.random.default_rng(8)).samples
    samples = render_background(scene, np.random.default_rng(8)).samples
    truth = noise_level(noise, sample_rate_hz=RATE_HZ)
    stroke = quick_scene(3.0, equatorial_density_cm3=900.0, snr_db=20.0).strokes[0]
    strokes = tuple(replace(stroke, lightning_time_s=at) for at in (1.0, 6.0, 11.0, 16.0))
    sources = np.random.default_rng(2).spawn(len(strokes))
    heard = add_strokes(samples, replace(scene, strokes=strokes), noise=truth, sources=sources)
    around = around_of(block_of(SCALE * heard.samples))
    found = around.noise.power * (around.noise_unit / SCALE) ** 2
    band = (truth.frequency_hz > 900.0) & (truth.frequency_hz < 9500.0)
    excess_db = 10.0 * np.log10(np.median(found[band] / truth.power[band]))
    assert abs(excess_db) < tolerance_db


def test_strength_is_power_over_noise_on_the_true_curve(white: AudioBlock) -> None:
    """Reference: cells cut out and transformed one by one; white noise of variance v has the mean
    power v times the sum of the squared window in each. Tolerance: the noise is measured, with
    0.05 dB of scatter, and the band's channels are not the same to the last one."""
    audio = injected(around_of(white), snr_db=7.0)
    assert len(audio.whistlers) == 4
    added = audio.block.samples.astype(float) - white.samples
    size = 512
    window = 0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(size) / size)
    for truth in audio.whistlers:
        ratios = []
        for channel in range(size // 2):
            at_hz = channel * RATE_HZ / size
            if truth.frequency_low_hz <= at_hz <= truth.frequency_high_hz:
                time_s = np.interp(at_hz, truth.trace.frequency_hz, truth.trace.time_s)
                first = round(time_s * RATE_HZ) - size // 2
                cell = np.zeros(size)
                part = added[max(first, 0) : first + size]
                cell[: part.size] = part
                power = (
                    abs(
                        np.sum(
                            cell * window * np.exp(-2j * np.pi * channel / size * np.arange(size))
                        )
                    )
                    ** 2
                )
                ratios.append(power / (SCALE**2 * np.sum(window**2)))
        assert 10.0 * np.log10(np.median(ratios)) == pytest.approx(7.0, abs=0.4)
        assert truth.snr_db == 7.0


def test_the_rest_of_the_audio_is_untouched(white: AudioBlock) -> None:
    """Identity: nothing before the first stroke; the input is not written to (it cannot be)."""
    audio = injected(around_of(white), count=2)
    first = min(truth.lightning_time_s for truth in audio.whistlers)
    quiet = slice(0, int((first - 0.2) * RATE_HZ))
    assert np.array_equal(audio.block.samples[quiet], white.samples[quiet])
    assert not np.array_equal(audio.block.samples, white.samples)


def test_whistlers_come_one_after_another(white: AudioBlock) -> None:
    audio = injected(around_of(white), count=40)
    ends = [float(truth.trace.time_s.max()) for truth in audio.whistlers]
    begins = [truth.lightning_time_s for truth in audio.whistlers]
    assert 5 <= len(begins) < 40
    assert all(end + 0.29 < begin for end, begin in zip(ends, begins[1:], strict=False))
    assert ends[-1] < 30.0
    assert any(audio.diffuse) and not all(audio.diffuse)


def test_same_draws_give_the_same_audio(white: AudioBlock) -> None:
    around = around_of(white)
    one, two, other = (injected(around, seed=seed) for seed in (1, 1, 2))
    assert np.array_equal(one.block.samples, two.block.samples)
    assert not np.array_equal(one.block.samples, other.block.samples)


def test_not_where_a_trace_of_the_recording_or_silence_is(white: AudioBlock) -> None:
    first = injected(around_of(white)).whistlers[0]
    shifted = TraceTruth(first.trace.frequency_hz, first.trace.time_s + 0.04)
    again = injected(around_of(white, traces=[shifted]))
    assert again.rejected == 1
    assert len(again.whistlers) == 3
    usable = white.usable.copy()
    usable[int((first.lightning_time_s + 0.3) * RATE_HZ)] = False
    assert injected(around_of(replace(white, usable=usable))).rejected == 1


def test_sferic_of_a_receiver_nearer_the_equator(white: AudioBlock) -> None:
    """Identity: the sferic comes when the fits expect it for that station. The renderer keeps
    distances to a metre: 1e-8 s."""
    settings = Settings(station=Station(latitude_deg=40.0, longitude_deg=15.0))
    around = around_of(white, settings=settings)
    assert around.latitude_rad is not None
    odd = [truth for truth in injected(around, count=6).whistlers if truth.hops == 1]
    assert odd
    for truth in odd:
        wanted_s = sferic_path_s(truth.l_value, receiver_latitude_rad=around.latitude_rad)
        assert truth.sferic_time_s - truth.lightning_time_s == pytest.approx(wanted_s, abs=1e-7)


def test_backwards_without_the_traces_found(white: AudioBlock) -> None:
    trace = TraceTruth(np.array([2000.0, 4000.0]), np.array([5.0, 4.5]))
    turned = backwards(white, [trace])
    assert np.array_equal(turned.samples[: 24 * RATE_HZ], white.samples[::-1][: 24 * RATE_HZ])
    gone = ~turned.usable[::-1]
    assert (np.flatnonzero(gone)[[0, -1]] / RATE_HZ).tolist() == pytest.approx([4.2, 5.3], abs=1e-3)
    assert not turned.samples[::-1][gone].any()
