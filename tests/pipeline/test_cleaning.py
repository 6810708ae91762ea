"""Whitening, hum, sferics and time-keeping of the front end, against outside referees."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from makers import block
from scipy import signal

from whistler.cleaning import CleanAudio, clean
from whistler.settings import Settings
from whistler.station import Station

RATES_HZ = (8000, 11_025, 16_000, 22_050, 44_100, 48_000, 96_000, 192_000)


def cleaned(samples: np.ndarray, rate_hz: int, **settings: object) -> CleanAudio:
    return clean(block(samples, rate_hz), settings=Settings(**settings))  # type: ignore[arg-type]


def level_db(audio: CleanAudio, line_hz: float, *, within_hz: float = 0.3) -> float:
    """Power of a line over its surroundings, from Welch transforms of 8 s."""
    rate_hz = audio.sample_rate_hz
    frequency_hz, density = signal.welch(audio.samples, rate_hz, nperseg=round(8 * rate_hz))
    away_hz = np.abs(frequency_hz - line_hz)
    line = density[away_hz < within_hz].max()
    return float(10 * np.log10(line / np.median(density[(away_hz > 1.0) & (away_hz < 20.0)])))


def test_whitened_noise_is_flat() -> None:
    """Reference (scipy.signal.welch): noise with a slope and a 14 dB band comes out flat to 1 dB.

    40 s give 470 segments of 2048: 0.2 dB of scatter a channel, 0.7 dB at the worst of 800; the
    edges of the band of hiss (7 dB in 200 Hz) are smoothed over two channels of 47 Hz.
    """
    rate_hz, generator = 48_000, np.random.default_rng(1)
    noise = signal.lfilter([1.0], [1.0, -0.9], generator.standard_normal(40 * rate_hz))
    band = signal.butter(2, [1800, 2600], "bandpass", fs=rate_hz, output="sos")
    noise += 4 * signal.sosfilt(band, generator.standard_normal(noise.size))

    def spread_db(samples: np.ndarray, rate_hz: float) -> float:
        frequency_hz, density = signal.welch(samples, rate_hz, nperseg=round(rate_hz / 11.7))
        inside = density[(frequency_hz > 500) & (frequency_hz < 9800)]
        return float(10 * np.log10(inside / np.median(inside)).max())

    audio = cleaned(1e-3 * noise, rate_hz)
    assert spread_db(noise, rate_hz) > 10.0
    assert spread_db(audio.samples, audio.sample_rate_hz) < 1.0
    assert np.median(np.abs(audio.samples)) / 0.6745 == pytest.approx(1.0, abs=0.02)
    assert audio.blanked.mean() < 0.005


@pytest.mark.parametrize(
    ("nominal_hz", "mains_hz", "rate_hz"),
    [(50, 50.063, 32_000), (50, 49.93, 8000), (60, 60.021, 32_000)],
)
def test_mains_comb_is_found_and_lowered(nominal_hz: int, mains_hz: float, rate_hz: int) -> None:
    """Recovery: frequency to 0.02 Hz, lines 20 dB down, a tone between them as it was.

    The trial grid is 0.005 Hz fine. A tone half-way between two harmonics is 25 Hz off the nearest,
    where a removed bin reaches 2.2 Hz; 0.5 dB is the scatter of the noise it is compared with.
    """
    time_s = np.arange(40 * rate_hz) / rate_hz
    noise = np.random.default_rng(2).standard_normal(time_s.size)
    tone = 0.15 * np.cos(2 * np.pi * 36.5 * mains_hz * time_s)
    hum = np.zeros_like(noise)
    for k in range(1, 51):
        hum += 3.0 / np.sqrt(k) * np.cos(2 * np.pi * k * mains_hz * time_s + k)
    station = Station(mains_hz=nominal_hz)
    without = cleaned(0.01 * (noise + tone), rate_hz, station=station)
    audio = cleaned(0.01 * (noise + tone + hum), rate_hz, station=station)
    assert audio.mains_hz == pytest.approx(mains_hz, abs=0.02)
    assert np.isnan(without.mains_hz)
    for k in (8, 20, 35, 50):
        raw = CleanAudio(noise + hum, without.blanked, rate_hz, 0.0, 0.0, without.sferics, np.nan)
        assert level_db(raw, k * mains_hz) > 30.0
        assert level_db(audio, k * mains_hz) < level_db(raw, k * mains_hz) - 20.0
    off_hz = 36.5 * mains_hz
    assert level_db(without, off_hz) > 20.0
    assert level_db(audio, off_hz) == pytest.approx(level_db(without, off_hz), abs=0.5)


@pytest.mark.parametrize("rate_hz", RATES_HZ)
def test_samples_keep_their_time(rate_hz: int) -> None:
    """Reference (scipy.signal.resample_poly): the whitened noise lies where the input has it.

    Near the beginning and the end of 6 s, the cross-correlation with the input at the same rate
    peaks within 0.1 ms of no shift: whistlers are timed to 0.1 ms at best.
    """
    samples = np.random.default_rng(3).standard_normal(round(6.3 * rate_hz))
    audio = cleaned(0.1 * samples, rate_hz)
    ratio = Fraction(audio.sample_rate_hz / rate_hz).limit_denominator(1000)
    assert audio.sample_rate_hz == pytest.approx(float(ratio * rate_hz), rel=1e-12)
    assert 0.47 * audio.sample_rate_hz >= min(audio.band_high_hz, 0.47 * rate_hz)
    same = signal.resample_poly(samples, ratio.numerator, ratio.denominator)
    assert abs(len(same) - len(audio.samples)) <= 1
    size = round(audio.sample_rate_hz)
    for first in (0, len(audio.samples) - size):
        part = slice(first, first + size)
        score = signal.correlate(audio.samples[part], same[part], "same")
        k = int(np.argmax(score))
        left, middle, right = score[k - 1 : k + 2]
        lag = k - size // 2 + 0.5 * (left - right) / (left - 2 * middle + right)
        assert abs(lag) / audio.sample_rate_hz < 1e-4


@pytest.mark.parametrize("rate_hz", RATES_HZ)
def test_impulses_are_blanked_and_catalogued(rate_hz: int) -> None:
    """Recovery: impulses of 15 to 5000 sigma are blanked, their fronts are read to 1.3 ms.

    White impulses are the worst case: the zero-phase filters ring ahead of them at the top of the
    band, for one over the width of the skirt there (800 Hz). A sferic's top is weaker; see
    test_sferic.py for how well those are read.
    """
    generator = np.random.default_rng(4)
    samples = generator.standard_normal(round(8.0 * rate_hz))
    true_s = np.round((0.5 + 0.37 * np.arange(19)) * rate_hz) / rate_hz
    sharpness = np.sqrt(max(rate_hz / 24_000, 1.0))  # an impulse in a band holds that share of it
    peak = np.geomspace(15.0, 5000.0, 19) * sharpness
    samples[np.round(true_s * rate_hz).astype(int)] += peak
    audio = cleaned(1e-4 * samples, rate_hz)
    at = np.round(true_s * audio.sample_rate_hz).astype(int)
    assert audio.blanked[at].all()
    assert not audio.samples[audio.blanked].any()
    assert audio.blanked.mean() < 0.08  # 19 of about 5 ms, and the noise above four sigma
    apart_s = audio.sferics.time_s - true_s[:, None]
    nearest = np.argmin(np.abs(apart_s), axis=1)
    assert np.abs(apart_s[np.arange(19), nearest]).max() < 1.3e-3
    growth = audio.sferics.amplitude[nearest] / np.geomspace(15.0, 5000.0, 19)
    assert growth.max() < 2.0 * growth.min()


@pytest.mark.parametrize("cell_snr_db", [20.0, 30.0, 40.0, 50.0])
def test_a_strong_narrow_sweep_is_kept(cell_snr_db: float) -> None:
    """Identity: a sweep from 5 to 1 kHz in 1 s loses no more samples than the noise around it.

    At 30 dB in a 21.3 ms Hann cell it is as strong as the noise in the whole band, at 50 dB ten
    times as strong: a fixed threshold of four sigma would blank all of it.
    """
    rate_hz = 32_000
    time_s = np.arange(12 * rate_hz) / rate_hz
    noise = np.random.default_rng(5).standard_normal(time_s.size)
    # A tone of amplitude a has a^2 N / 6 of power in a Hann cell of N samples over unit noise.
    height = np.sqrt(10 ** (cell_snr_db / 10) * 6.0 / (0.0213 * rate_hz))
    since_s = time_s - 4.0
    sweep = height * np.cos(2 * np.pi * (5000.0 * since_s - 2000.0 * since_s**2))
    inside = (since_s > 0.0) & (since_s < 1.0)
    audio = cleaned(0.01 * (noise + inside * sweep), rate_hz)
    seconds = np.arange(len(audio.samples)) / audio.sample_rate_hz
    lost = audio.blanked[(seconds > 4.02) & (seconds < 4.98)].mean()
    assert lost <= 0.01


def test_unusable_samples_spoil_only_their_surroundings() -> None:
    """Identity: 50 ms beside a gap of half a second the audio is the same, to a tenth of a sigma.

    The gap shortens what the level of the noise is estimated from by 4 %: 0.03 of the sigma.
    """
    rate_hz = 24_000
    samples = 0.1 * np.random.default_rng(6).standard_normal(12 * rate_hz)
    usable = np.ones(samples.size, bool)
    usable[round(5.0 * rate_hz) : round(5.5 * rate_hz)] = False
    whole = clean(block(samples, rate_hz), settings=Settings())
    gap = clean(block(np.where(usable, samples, 0.0), rate_hz, usable), settings=Settings())
    time_s = np.arange(samples.size) / rate_hz
    assert gap.blanked[(time_s >= 5.0) & (time_s < 5.5)].all()
    assert gap.blanked[(time_s > 4.995) & (time_s < 5.505)].mean() < 0.999
    away = (time_s < 4.95) | (time_s > 5.55)
    both = away & ~gap.blanked & ~whole.blanked
    assert both[away].mean() > 0.99
    assert np.abs(gap.samples[both] - whole.samples[both]).max() < 0.1


@pytest.mark.parametrize("gap_share", [0.3, 0.6, 0.9])
def test_much_silence_does_not_change_the_rest(gap_share: float) -> None:
    """Identity: the level of the noise is that of what is there, however much is missing."""
    rate_hz = 24_000
    samples = 0.1 * np.random.default_rng(7).standard_normal(20 * rate_hz)
    usable = np.arange(samples.size) >= gap_share * samples.size
    audio = clean(block(np.where(usable, samples, 0.0), rate_hz, usable), settings=Settings())
    rest = audio.samples[round((gap_share + 0.02) * samples.size) :]
    assert np.std(rest) == pytest.approx(1.0, abs=0.05)
    frequency_hz, density = signal.welch(rest, rate_hz, nperseg=512)
    inside = density[(frequency_hz > 600) & (frequency_hz < 9600)]
    assert np.abs(10 * np.log10(inside / np.median(inside))).max() < 1.5  # 90 segments: 0.5 dB


def test_silence_stays_silent() -> None:
    """Identity: zeros in, zeros out, nothing catalogued, no warning (which would fail here)."""
    for size in (10, 4000, 240_000):
        audio = cleaned(np.zeros(size), 24_000)
        assert len(audio.samples) == size
        assert not audio.samples.any()
        assert len(audio.sferics.time_s) == 0
