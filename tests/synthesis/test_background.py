"""Hum, hiss, noise, chorus, transmitters, receiver."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import signal

from whistler.synthesis.mains import mains_hum
from whistler.synthesis.noise import stationary_noise, white_rms
from whistler.synthesis.parts import (
    Chorus,
    Dropout,
    Hiss,
    Mains,
    Noise,
    Receiver,
    Sferics,
    Transmitter,
)
from whistler.synthesis.render import render
from whistler.synthesis.scene import Scene
from whistler.synthesis.sferics import Band
from whistler.synthesis.tones import chorus_elements, transmitter_signal

BAND = Band(16_000.0, 150.0)
FRAMES = 16_000 * 20


def spectrum_of(samples):
    window = signal.windows.blackmanharris(samples.size)
    return np.abs(np.fft.rfft(samples * window)), np.fft.rfftfreq(samples.size, 1 / 16_000)


@pytest.mark.parametrize("mains_hz", [50.0, 60.0])
def test_hum_stands_at_multiples_of_the_mains_frequency(mains_hz):
    """Identity: without drift the lines lie within 0.05 Hz (one bin) of k times 50 or 60 Hz, and
    nothing lies between.
    """
    hum = mains_hum(
        Mains(frequency_hz=mains_hz, drift_hz=0.0, harmonics=40),
        np.random.default_rng(2),
        band=BAND,
        frame_count=FRAMES,
    )
    size, frequency = spectrum_of(hum.samples)
    for order in (1, 2, 3, 7, 20, 39):
        near = np.flatnonzero(np.abs(frequency - order * mains_hz) < 0.4 * mains_hz)
        peak = near[size[near].argmax()]
        assert abs(frequency[peak] - order * mains_hz) <= 0.05
        between = np.flatnonzero(np.abs(frequency - (order + 0.5) * mains_hz) < 5.0)
        assert size[between].max() < 1e-3 * size[peak]
    assert hum.samples.std() == pytest.approx(12.0, rel=0.01)


def test_hum_drifts_as_far_as_it_may():
    """Recovery: the demodulated 3rd harmonic follows the true fundamental within 0.01 Hz (the
    resolution of a second of phase at this level), which stays within the drift.
    """
    hum = mains_hum(
        Mains(drift_hz=0.1), np.random.default_rng(4), band=BAND, frame_count=4 * FRAMES
    )
    assert 0.04 < np.abs(hum.frequency_hz - 50.0).max() <= 0.1
    time_s = np.arange(hum.samples.size) / 16_000
    mixed = hum.samples * np.exp(-2j * np.pi * 150.0 * time_s)
    seconds = mixed.reshape(-1, 16_000).mean(axis=1)
    measured = np.diff(np.unwrap(np.angle(seconds))) / (2 * np.pi) / 3 + 50.0
    true = hum.frequency_hz.reshape(-1, 16_000).mean(axis=1)
    assert np.abs(measured - 0.5 * (true[1:] + true[:-1])).max() < 0.01


def test_load_switchings_change_the_harmonics():
    """Identity: with switchings the level of a harmonic jumps, without them it is constant."""
    quiet = Mains(drift_hz=0.0)
    jumps = []
    for mains in (quiet, replace(quiet, steps_per_minute=12.0)):
        samples = mains_hum(
            mains, np.random.default_rng(5), band=BAND, frame_count=3 * FRAMES
        ).samples
        time_s = np.arange(samples.size) / 16_000
        level = np.abs(
            (samples * np.exp(-2j * np.pi * 150.0 * time_s)).reshape(-1, 8000).mean(axis=1)
        )
        jumps.append(np.ptp(level) / level.mean())
    assert jumps[0] < 0.01 < 0.1 < jumps[1]


def test_noise_unit_is_the_receiver_noise_in_10_khz():
    """Identity: one-sided density times 10 kHz is 1 (definition), to 2 % (estimator scatter)."""
    samples = stationary_noise(
        Noise(atmospheric_db=-100.0), np.random.default_rng(1), band=BAND, frame_count=FRAMES
    )
    frequency, density = signal.welch(samples, 16_000, nperseg=512)
    middle = density[(frequency > 1000) & (frequency < 6000)].mean()
    assert middle * 10e3 == pytest.approx(1.0, rel=0.02)
    assert white_rms(20_000.0) == 1.0


@pytest.mark.parametrize("level_db", [10.0, 20.0])
def test_transmitter_stands_as_far_above_the_noise_as_asked(level_db):
    """Recovery: power in a 21.3 ms Hann cell over the mean power of unit noise, within 0.3 dB."""
    steady = Transmitter(frequency_hz=3000.0, level_db=level_db, keying="steady")
    tone = transmitter_signal(steady, np.random.default_rng(1), band=BAND, frame_count=FRAMES)
    noise = np.random.default_rng(2).standard_normal(FRAMES) * np.sqrt(0.8)  # 8 kHz of 10
    size = round(16_000 * 1024 / 48_000)
    power = [np.abs(signal.stft(x, 16_000, "hann", nperseg=size)[2]) ** 2 for x in (tone, noise)]
    measured_db = 10 * np.log10(power[0].max(axis=0)[5:-5].mean() / power[1][20:-20].mean())
    # the strongest channel may lie up to half a bin off the carrier: at most 1.4 dB low
    assert measured_db == pytest.approx(level_db, abs=0.3)


def test_swept_transmitter_covers_its_span():
    """Identity: the sweep starts at the carrier and ends a span away."""
    swept = Transmitter(frequency_hz=5000.0, keying="swept", period_s=2.0, span_hz=-1500.0)
    samples = transmitter_signal(swept, np.random.default_rng(1), band=BAND, frame_count=FRAMES)
    frequency, _, cell = signal.stft(samples, 16_000, "hann", nperseg=340)
    ridge_hz = frequency[np.abs(cell).argmax(axis=0)]
    # within one channel of 47 Hz
    assert ridge_hz.min() == pytest.approx(3500.0, abs=47.0)
    assert ridge_hz.max() == pytest.approx(5000.0, abs=47.0)


@pytest.mark.parametrize(("falling_share", "sign"), [(0.0, 1.0), (1.0, -1.0)])
def test_chorus_rises_or_falls(falling_share, sign):
    """Identity: the ridge of elements moves up (risers) or down (fallers) at 1 to 10 kHz/s."""
    samples = chorus_elements(
        Chorus(rate_hz=0.5, falling_share=falling_share),
        np.random.default_rng(7),
        band=BAND,
        frame_count=FRAMES,
    )
    _, _, cell = signal.stft(samples, 16_000, "hann", nperseg=340, noverlap=340 - 64)
    power = np.abs(cell) ** 2
    loud = power.max(axis=0) > 0.05 * power.max()
    ridge_hz = power.argmax(axis=0) * 16_000 / 340
    slope = np.diff(ridge_hz)[loud[1:] & loud[:-1]] / (64 / 16_000)
    slope = slope[np.abs(slope) < 30e3]  # steps from one element to the next
    assert 800.0 < sign * slope.mean() < 12e3


def test_hiss_fills_its_band():
    """Identity: density of the band over the noise as asked, within 1 dB; none outside."""
    plain = Scene(30.0, 16_000, 3, noise=Noise(-100.0), receiver=Receiver(full_scale=100.0))
    hissing = replace(plain, hiss=(Hiss(2000.0, 4000.0, level_db=10.0, modulation=0.0),))
    density = [
        signal.welch(render(scene).samples, 16_000, nperseg=1024)[1] for scene in (plain, hissing)
    ]
    ratio_db = 10 * np.log10(density[1] / density[0])
    frequency = np.linspace(0, 8000, 513)
    inside = ratio_db[(frequency > 2400) & (frequency < 3600)].mean()
    assert inside == pytest.approx(10 * np.log10(1 + 10), abs=1.0)
    assert ratio_db[(frequency > 5000) & (frequency < 7000)].mean() < 0.2


def test_receiver_clips_rounds_and_drops_out():
    """Identity: full scale is never passed, samples are whole steps, dropouts are NaN."""
    scene = Scene(
        4.0,
        16_000,
        9,
        sferics=(Sferics(rate_hz=20.0, median_peak=200.0),),
        receiver=Receiver(full_scale=30.0, bits=8, dropouts=(Dropout(1.0, 0.25),)),
    )
    samples = render(scene).samples
    assert np.isnan(samples[16_000:20_000]).all()
    heard = samples[np.isfinite(samples)]
    assert heard.size == 60_000
    assert heard.min() == -1.0
    assert heard.max() == 127 / 128
    assert np.array_equal(heard * 128, np.round(heard * 128))


def test_automatic_gain_leaves_one_decibel():
    """Identity: without full_scale the strongest sample is 1 dB below full scale."""
    samples = render(Scene(2.0, 16_000, 9, sferics=(Sferics(),))).samples
    assert np.abs(samples).max() == pytest.approx(10 ** (-1 / 20), abs=1e-4)
