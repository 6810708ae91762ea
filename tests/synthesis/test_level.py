"""Strength, ridge and band of rendered whistlers, measured afresh with another transform."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import signal

from whistler.synthesis.parts import Mains, Receiver, Sferics
from whistler.synthesis.render import render
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Path, Stroke
from whistler.synthesis.wave import prepare_ray

RATE_HZ = 32_000


def scene_with(*paths, duration_s=10.0, sferics_hz=20.0):
    return Scene(
        duration_s=duration_s,
        sample_rate_hz=RATE_HZ,
        seed=11,
        sferics=(Sferics(rate_hz=sferics_hz),),
        mains=Mains(),
        strokes=(Stroke(1.0, paths, sferic_strength=0.0),),
        receiver=Receiver(full_scale=1e5, bits=24),  # nothing clips, rounding is far below noise
    )


def parts_of(scene):
    """The whistlers alone, the background alone, and the truth."""
    whole = render(scene)
    without = render(replace(scene, strokes=()))
    background = without.samples.astype(np.float64)
    return whole.samples - background, background, whole.truth


def cells(samples, size):
    """Spectrogram with a hop of one sixteenth of the window."""
    return signal.stft(samples, RATE_HZ, "hann", nperseg=size, noverlap=size - size // 16)


@pytest.mark.parametrize(
    ("path", "sferics_hz"),
    [
        (Path(2.3, 1500.0, snr_db=10.0), 20.0),
        (Path(3.0, 900.0, snr_db=14.0, spread_s=0.004), 3.0),
        (Path(4.3, 350.0, snr_db=20.0, hops=(2,)), 20.0),
        (Path(3.0, 900.0, snr_db=8.0, frequency_low_hz=700.0, frequency_high_hz=4000.0), 70.0),
    ],
)
def test_cell_snr_is_the_one_asked_for(path, sferics_hz):
    """Recovery: median ridge power over median noise by scipy's transform, within 0.5 dB.

    The bound is the issue's; the transforms differ in hop (1.3 ms) and in how the ridge is read.
    """
    whistler, background, truth = parts_of(scene_with(path, sferics_hz=sferics_hz))
    row = truth.whistlers[0]
    size = round(1024 / 48_000 * RATE_HZ) // 2 * 2
    frequency, time, cell = cells(whistler, size)
    noise = np.median(np.abs(cells(background, size)[2]) ** 2, axis=1) / np.log(2)
    inside = np.flatnonzero(
        (frequency >= row.frequency_low_hz) & (frequency <= row.frequency_high_hz)
    )
    arrival = np.interp(frequency[inside], row.trace.frequency_hz, row.trace.time_s)
    frame = np.clip(np.searchsorted(time, arrival), 1, time.size - 1)
    frame -= time[frame] - arrival > arrival - time[frame - 1]
    power = np.abs(cell[inside, frame]) ** 2
    measured_db = 10 * np.log10(np.median(power / noise[inside]))
    assert measured_db == pytest.approx(path.snr_db, abs=0.5)


@pytest.mark.parametrize("window_s", [0.016, 0.0213, 0.032])
@pytest.mark.parametrize(("l_value", "density"), [(2.4, 1400.0), (3.2, 800.0), (4.2, 380.0)])
def test_ridge_of_the_spectrogram_is_the_true_trace(window_s, l_value, density):
    """Recovery: ridge within 2 ms of the true curve at windows of 16 ms or more.

    The issue's bound; on a smooth chirp the ridge is biased only by curvature and by the hop (1 to
    2 ms, read to a fraction by a parabola).
    """
    path = Path(l_value, density, snr_db=40.0, spread_s=0.0, fading_depth=0.0)
    whistler, _, truth = parts_of(scene_with(path))
    trace = truth.whistlers[0].trace
    frequency, time, cell = cells(whistler, int(window_s * RATE_HZ) // 2 * 2)
    # off the soft band edges, where the amplitude moves the ridge, and where the curve bends so
    # much within a channel (below 1.5 kHz at L = 4.2) that its mean delay is not its mid delay
    inside = (frequency > 1.5 * trace.frequency_hz[0]) & (frequency < 0.9 * trace.frequency_hz[-1])
    power = np.log(np.abs(cell[inside]) + 1e-12)
    peak = power.argmax(axis=1)
    rows = np.arange(peak.size)
    before, at, after = (power[rows, peak + k] for k in (-1, 0, 1))
    shift = 0.5 * (before - after) / (before - 2 * at + after)
    ridge = time[peak] + shift * (time[1] - time[0])
    expected = np.interp(frequency[inside], trace.frequency_hz, trace.time_s)
    assert np.abs(ridge - expected).max() < 2e-3


def test_echoes_lose_strength_and_are_dispersed_by_their_hops():
    """Identity: hop h arrives h times later than hop 1, weaker by the loss per crossing."""
    path = Path(2.4, 1300.0, snr_db=20.0, hops=(1, 3, 5), hop_loss_db=2.0)
    truth = render(scene_with(path, duration_s=12.0)).truth
    first, third, fifth = truth.whistlers
    for row in (third, fifth):
        delay = row.trace.time_s - row.lightning_time_s
        single = first.trace.time_s - first.lightning_time_s
        assert delay == pytest.approx(row.hops * single, rel=1e-12)
    assert [row.snr_db for row in truth.whistlers] == [20.0, 16.0, 12.0]
    assert {row.group for row in truth.whistlers} == {1}


def test_duct_spread_makes_the_trace_as_thick_as_asked():
    """Recovery: r.m.s. width of a diffuse trace in mid-band, averaged over channels, within 20 %.

    Thirty-two sub-paths interfere: each channel is speckled, the mean over some thirty is not.
    """
    path = Path(
        3.0, 900.0, snr_db=40.0, spread_s=0.03, frequency_low_hz=700.0, frequency_high_hz=4000.0
    )
    whistler, _, truth = parts_of(scene_with(path))
    trace = truth.whistlers[0].trace
    frequency, time, cell = cells(whistler, 512)
    inside = np.flatnonzero((frequency > 1300.0) & (frequency < 2200.0))
    centre = np.interp(frequency[inside], trace.frequency_hz, trace.time_s)
    offset = time - centre[:, None]
    power = np.abs(cell[inside]) ** 2 * (np.abs(offset) < 0.2)
    width = np.sqrt(np.sum(power * offset**2) / np.sum(power))
    assert width == pytest.approx(path.spread_s, rel=0.2)
    assert abs(np.sum(power * offset) / np.sum(power)) < 0.01  # centred on the true curve


def test_band_ends_where_it_should():
    """Identity: the spectrum is down by 6 dB at the limits and gone beyond the edges."""
    path = Path(3.0, 900.0, snr_db=40.0, spread_s=0.0, fading_depth=0.0, frequency_low_hz=1500.0)
    whistler, _, truth = parts_of(scene_with(path))
    row = truth.whistlers[0]
    spectrum = np.abs(np.fft.rfft(whistler)) * 1.0
    frequency = np.fft.rfftfreq(whistler.size, 1 / RATE_HZ)

    def level(centre_hz):
        return np.sqrt(np.mean(spectrum[np.abs(frequency - centre_hz) < 20.0] ** 2))

    middle = level(4000.0)
    assert row.frequency_high_hz == 9500.0
    assert level(1500.0) / middle == pytest.approx(0.5, abs=0.05)
    assert level(9500.0) / middle == pytest.approx(0.5, abs=0.05)
    assert max(level(1200.0), level(10_300.0)) / middle < 1e-3


def test_upper_limit_is_half_the_gyrofrequency_at_high_l():
    """Reference: 29 733.37 nT (IGRF-14, 2025.0, via ppigrf) gives 832.311 kHz / L^3 (28 GHz/T)."""
    ray = prepare_ray(Path(4.5, 300.0), model=Scene(1.0, 8000, 1).medium.field_line_model())
    assert ray.high_hz == pytest.approx(0.5 * 832_310.9 / 4.5**3, rel=1e-5)
