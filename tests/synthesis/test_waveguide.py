"""Sferics against the laws of a flat waveguide."""

import numpy as np
import pytest
from scipy import constants, signal

from whistler.synthesis.noise import atmospheric_density
from whistler.synthesis.parts import Receiver, Sferics
from whistler.synthesis.render import render, sferic_distance
from whistler.synthesis.scene import Scene
from whistler.synthesis.sferics import (
    Band,
    draw_arrivals,
    place_one,
    pulse_length,
    pulse_spectrum,
)
from whistler.synthesis.strokes import Path, Stroke
from whistler.synthesis.waveguide import (
    LEAD_S,
    Discharge,
    Guide,
    cutoff_frequency,
    sferic_spectrum,
)

BAND = Band(48_000.0, 150.0)


def test_first_cutoff_at_85_km_is_1763_hz():
    """Reference: c / (2 h), project notes table 9 (computed independently): 1763.49 Hz."""
    assert cutoff_frequency(85e3) == pytest.approx(1763.49, abs=0.01)
    assert cutoff_frequency(85e3, mode=2) == pytest.approx(3526.97, abs=0.01)


def pulse(distance_m, tweek_db=-22.0, height_m=85e3):
    guide = Guide(height_m, tweek_db)
    spectrum = pulse_spectrum(BAND, distance_m=distance_m, guide=guide, discharge=Discharge())
    return np.fft.irfft(spectrum, pulse_length(BAND))


@pytest.mark.parametrize("distance_m", [1000e3, 5000e3, 10_000e3])
def test_phase_of_a_tweek_has_the_group_delay_of_the_first_mode(distance_m):
    """Reference: (d/c)/sqrt(1-(fc/f)^2), project notes table 9, computed independently.

    0.15 ms: the pulse of the current itself (0.09 ms) and the damping add up to that.
    """
    excess_s = {  # at 85 km and 1000 km distance; proportional to distance
        1900.0: 5.626e-3,
        2000.0: 3.735e-3,
        2500.0: 1.370e-3,
        3000.0: 0.788e-3,
    }
    guide = Guide(85e3, 80.0)  # the slightly damped modes alone
    for frequency_hz, late_s in excess_s.items():
        near = frequency_hz + np.array([-0.5, 0.5])
        spectrum = sferic_spectrum(
            near, distance_m=distance_m, guide=guide, discharge=Discharge(tail=0.0)
        )
        delay_s = -np.angle(spectrum[1] / spectrum[0]) / (2 * np.pi)
        expected_s = late_s * distance_m / 1000e3
        assert delay_s == pytest.approx(expected_s, abs=0.15e-3 + 0.01 * expected_s)


def test_tweek_tail_shows_in_a_spectrogram():
    """Identity: ridge of a tweek of 2000 km within 0.7 ms of (d/c) / sqrt(1 - (fc/f)^2).

    0.7 ms: the 8 ms window of the spectrogram is several times wider; bending of the ridge within
    it and the neighbouring modes shift the peak by a fraction of that.
    """
    distance_m = 2000e3
    samples = pulse(distance_m, tweek_db=10.0)
    frequency, time, cell = signal.stft(
        samples, BAND.sample_rate_hz, "hann", nperseg=384, noverlap=380, nfft=4096
    )
    cutoff_hz = constants.c / (2 * 85e3)
    for wanted_hz in (2100.0, 2400.0, 2900.0):
        k = int(np.abs(frequency - wanted_hz).argmin())
        ridge_s = time[np.abs(cell[k]).argmax()] - LEAD_S
        late_s = distance_m / constants.c * (1 / np.sqrt(1 - (cutoff_hz / frequency[k]) ** 2) - 1)
        assert ridge_s == pytest.approx(late_s, abs=0.7e-3)


@pytest.mark.parametrize("distance_m", [300e3, 3000e3, 12_000e3])
def test_wave_front_comes_at_the_speed_of_light(distance_m):
    """Identity: above 6 kHz nothing before the front, half the peak within 1 ms after it.

    Band limits ring for a few tenths of a millisecond before the front; at 12 000 km the first
    mode is 1.6 ms late at 6 kHz but less above.
    """
    samples = pulse(distance_m)
    high = signal.sosfiltfilt(
        signal.butter(4, 6000.0, "high", fs=BAND.sample_rate_hz, output="sos"), samples
    )
    envelope = np.abs(signal.hilbert(high))
    first_s = np.flatnonzero(envelope > 0.5 * envelope.max())[0] / BAND.sample_rate_hz - LEAD_S
    assert -0.15e-3 < first_s < 1e-3
    early = envelope[: int((LEAD_S - 0.5e-3) * BAND.sample_rate_hz)]
    assert early.max() < 0.05 * envelope.max()


def test_distant_sferics_lack_the_absorption_band():
    """Reference: a real mid-latitude recording seen once (project notes): sferics dominate above
    3.5 kHz and are nearly absent from 1.2 to 3.5 kHz; here by 15 dB in amplitude density.
    """
    samples = pulse(6000e3)
    spectrum = np.abs(np.fft.rfft(samples))
    frequency = np.fft.rfftfreq(samples.size, 1 / BAND.sample_rate_hz)

    def level_db(low_hz, high_hz):
        inside = (frequency > low_hz) & (frequency < high_hz)
        return 10 * np.log10(np.mean(spectrum[inside] ** 2))

    assert level_db(5000, 9000) - level_db(1200, 3500) > 15
    assert level_db(150, 400) - level_db(1200, 3500) > 10  # the slow tail below
    density = atmospheric_density(np.linspace(0.0, 12_000.0, 1201))
    assert 10 * np.log10(density[150:300].max()) < -12


def test_causative_sferic_front_follows_the_path_from_the_conjugate_foot():
    """Identity: 2 Lambda RE / c with cos^2 Lambda = 1 / mean L (contract), to a sample.

    The energy of the band-limited pulse rises within 1.5 ms of the front at 12 000 km.
    """
    stroke = Stroke(1.0, (Path(2.5, 1300.0), Path(3.5, 640.0)), sferic_strength=60.0)
    expected_m = 2 * np.arccos(np.sqrt(1 / 3.0)) * 6371.2e3
    assert sferic_distance(stroke) == pytest.approx(expected_m, rel=1e-12)
    scene = Scene(6.0, 32_000, 5, strokes=(stroke,), receiver=Receiver(full_scale=200.0))
    recording = render(scene)
    row = recording.truth.whistlers[0]
    assert row.sferic_time_s == pytest.approx(1.0 + expected_m / constants.c, rel=1e-12)
    peak_s = np.abs(recording.samples).argmax() / 32_000
    assert 0.0 < peak_s - row.sferic_time_s < 1.5e-3
    assert row.sferic_peak == 60.0


def test_even_hops_start_beside_the_receiver():
    """Identity: 150 km plus the offset, so the sferic comes half a millisecond after the stroke."""
    stroke = Stroke(0.0, (Path(3.0, 900.0, hops=(2, 4)),), distance_offset_m=50e3)
    assert sferic_distance(stroke) == 200e3


def test_pulses_are_placed_between_samples():
    """Identity: moving a pulse by a third of a sample moves its spectrum's phase by as much."""
    guide, discharge = Guide(), Discharge()
    spectrum = pulse_spectrum(BAND, distance_m=2e6, guide=guide, discharge=discharge)
    shift_s = 1 / 3 / BAND.sample_rate_hz
    one, other = (
        np.fft.rfft(place_one(spectrum, time_s=t, peak=1.0, band=BAND, frame_count=48_000))
        for t in (0.5, 0.5 + shift_s)
    )
    k = 8000  # bins of 1 Hz
    turn = np.angle(other[k] / one[k]) / (2 * np.pi)
    assert turn == pytest.approx(-k * shift_s, abs=1e-3)


@pytest.mark.parametrize("rate_hz", [3.0, 20.0, 80.0])
def test_rate_and_amplitudes_of_a_population(rate_hz):
    """Recovery: count within 5 sigma of the rate (clustering 0.3 widens Poisson by 1.7), median
    amplitude within 15 %, spread within 15 %.
    """
    population = Sferics(rate_hz=rate_hz, median_peak=40.0, spread_db=7.0, clustering=0.3)
    arrivals = draw_arrivals(population, np.random.default_rng(3), duration_s=600.0)
    expected = rate_hz * 600.0
    assert abs(arrivals.time_s.size - expected) < 5 * 1.7 * np.sqrt(expected)
    level_db = 20 * np.log10(np.abs(arrivals.peak))
    assert 10 ** (np.median(level_db) / 20) == pytest.approx(40.0 * 10 ** (-0.3 / 20), rel=0.15)
    assert level_db.std() == pytest.approx(7.2, rel=0.15)
    assert np.all(np.diff(arrivals.time_s) >= 0)


def test_strongest_sferic_stands_far_above_the_rest():
    """Recovery: some 25 dB over the median in a minute at 20/s, as in real recordings (notes)."""
    arrivals = draw_arrivals(Sferics(), np.random.default_rng(8), duration_s=60.0)
    peak = np.abs(arrivals.peak)
    assert 18 < 20 * np.log10(peak.max() / np.median(peak)) < 36
