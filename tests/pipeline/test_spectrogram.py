"""The spectrogram against an outside transform and against the statistics of noise."""

from __future__ import annotations

import librosa
import numpy as np
import pytest
from makers import RATE_HZ, clean_audio

from whistler.spectrogram import spectrogram


@pytest.fixture(scope="module")
def noise() -> np.ndarray:
    return np.random.default_rng(11).standard_normal(round(20 * RATE_HZ)).astype(np.float32)


def test_frames_are_those_of_librosa(noise: np.ndarray) -> None:
    """Reference (librosa 0.11, librosa.stft): same power in every cell, up to the normalisation.

    The normalisation divides by one number a channel and one a frame, so the logarithm of the ratio
    is a row term plus a column term: what is left without their medians must vanish. float32
    transforms err by some 1e-7 of the frame's level: 1e-5 of the power in ordinary cells, and
    below 1e-2 in those 60 dB under it.
    """
    audio = clean_audio(noise, start_s=3.0)
    view = spectrogram(audio)
    size, hop = round(view.window_s * RATE_HZ), round(view.hop_s * RATE_HZ)
    theirs = np.abs(librosa.stft(noise, n_fft=size, hop_length=hop, window="hann", center=False))
    frequency_hz = librosa.fft_frequencies(sr=RATE_HZ, n_fft=size)
    kept = np.isin(np.round(frequency_hz, 6), np.round(view.frequency_hz, 6))
    assert kept.sum() == len(view.frequency_hz)
    assert view.power.shape == (kept.sum(), theirs.shape[1])
    ratio = np.log(view.power) - 2 * np.log(theirs[kept])
    ratio -= np.median(ratio, axis=1, keepdims=True)
    ratio -= np.median(ratio, axis=0, keepdims=True)
    assert np.quantile(np.abs(ratio), 0.99) < 1e-4
    assert np.abs(ratio).max() < 1e-2
    centre_s = 3.0 + librosa.frames_to_time(
        np.arange(theirs.shape[1]), sr=RATE_HZ, hop_length=hop, n_fft=size
    )
    np.testing.assert_allclose(view.time_s, centre_s, rtol=0, atol=1e-9)


def test_white_noise_has_unit_mean_power(noise: np.ndarray) -> None:
    """Identity: power over mean noise power averages to 1 and is exponential (median ln 2).

    Overall to 2 %, as the frames' own level of 200 channels is a quantile good to 10 % each. A
    channel holds 940 independent cells: 3 % of its own, and 3.5 % of its quantile; 5 sigma allowed.
    """
    power = spectrogram(clean_audio(noise)).power
    assert power.mean() == pytest.approx(1.0, abs=0.02)
    assert np.median(power) == pytest.approx(np.log(2.0), abs=0.02)
    assert np.abs(power.mean(axis=1) - 1.0).max() < 0.23


def test_colour_and_breathing_of_the_noise_are_taken_out(noise: np.ndarray) -> None:
    """Identity: noise with a slope of 30 dB, swelling by 12 dB, still has unit power everywhere."""
    swell = 2.0 ** np.sin(2 * np.pi * np.arange(len(noise)) / (2.0 * RATE_HZ))
    coloured = np.convolve(noise, 0.9 ** np.arange(60), mode="same") * swell
    power = spectrogram(clean_audio(coloured)).power
    halves = [power[:, loud] for loud in (slice(0, 125), slice(125, 250))]  # quarter and trough
    for part in (*halves, power[:40], power[-40:]):
        assert part.mean() == pytest.approx(1.0, abs=0.05)


def test_blanked_stretch_and_short_audio(noise: np.ndarray) -> None:
    """Identity: nothing is made of nothing: a blank frame has no power, silence is level."""
    samples = noise.copy()
    samples[round(5 * RATE_HZ) : round(6 * RATE_HZ)] = 0.0
    view = spectrogram(clean_audio(samples))
    inside = (view.time_s > 5.05) & (view.time_s < 5.95)
    assert view.power[:, inside].max() == 0.0
    assert np.all(spectrogram(clean_audio(np.zeros(10_000))).power == 1.0)
    assert spectrogram(clean_audio(noise[:100])).power.shape[1] == 1
