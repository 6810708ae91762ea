"""Times of sub-bands, their sigmas, thickness, and the alignment of bundles."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from makers import clean_audio, dispersed, in_noise

from fieldlines import FieldLineModel, travel_time
from whistler.pattern import align
from whistler.spectrogram import spectrogram
from whistler.trace import (
    SUB_BAND_HZ,
    Straightened,
    Trace,
    coarse_thickness,
    median_snr_db,
    read_trace,
    straighten,
)

Curve = Callable[[np.ndarray], np.ndarray]
BAND_HZ = (1000.0, 9000.0)


@pytest.fixture(scope="module")
def true_s(model: FieldLineModel) -> Curve:
    """Arrival of a whistler on L 2.8."""
    return lambda frequency_hz: (
        0.5 + travel_time(frequency_hz, l_value=2.8, equatorial_density_m3=1e9, model=model)
    )


@pytest.mark.parametrize("cell_snr_db", [6.0, 10.0, 20.0])
def test_thin_pulses_are_timed_near_the_bound(true_s: Curve, cell_snr_db: float) -> None:
    """Reference (timing bound of a flat band, Woodward 1953, from memory) and recovery.

    20 whistlers of a thin path, de-dispersed with a curve up to 0.5 ms off. A flat band b with
    energy-to-noise rho^2 is timed at best to sqrt(12) / (2 pi b rho). Here b is the whole Hann
    passband, twice the spacing S; its weights bring a peak of S rho2 / 1.5 over the noise. Picking
    the peak of the weighted pulse comes within 1.7 of the bound, and the stated sigma, which allows
    for thickness and has a floor of 0.1 ms, covers the errors.
    """
    generator = np.random.default_rng(round(cell_snr_db))
    wave = dispersed(true_s, band_hz=BAND_HZ, duration_s=4.0)
    errors, bounds, sigmas = [], [], []
    for _ in range(20):
        audio = in_noise(wave, cell_snr_db=cell_snr_db, generator=generator)
        phase = generator.uniform(0, 2 * np.pi)

        def curve(frequency_hz: np.ndarray, phase: float = phase) -> np.ndarray:
            return true_s(frequency_hz) + 0.0005 * np.sin(frequency_hz / 2500 + phase)

        view = straighten(audio, curve, band_hz=BAND_HZ)
        assert view is not None
        reading = read_trace(view, curve, window_s=0.02)
        assert reading is not None
        assert len(reading.trace.time_s) >= 18
        errors.append(reading.trace.time_s - true_s(reading.trace.frequency_hz))
        rho = np.sqrt(3.0 * (reading.snr - 1.0))
        bounds.append(np.sqrt(12.0) / (2 * np.pi * 2 * SUB_BAND_HZ * rho))
        sigmas.append(reading.trace.time_sd_s)
        assert np.median(reading.snr) > 10 ** (cell_snr_db / 10)  # de-dispersing gathers power
    error, bound, sigma = map(np.concatenate, (errors, bounds, sigmas))
    typical_s = np.median(np.abs(error)) / 0.6745
    assert abs(np.median(error)) < 0.1 * typical_s + 2e-5
    assert 0.95 * np.median(bound) < typical_s < 1.7 * np.median(bound)
    assert np.sqrt(np.mean((error / sigma) ** 2)) < 1.1
    assert np.median(sigma) < 7e-4
    assert np.mean(np.abs(error) > 5 * sigma) <= 0.005


@pytest.mark.parametrize("spread_s", [0.002, 0.004])
def test_the_middle_of_many_sub_paths_is_as_uncertain_as_stated(
    true_s: Curve, spread_s: float
) -> None:
    """Recovery: where 30 bundles of 20 waves of random strength lie, against the stated sigma.

    The rms of 30 scatters by 13 %, and the stated sigma, from the width that is read off one
    bundle, by a quarter: 0.7 to 1.4 are allowed. Below 2 ms the sub-bands hardly resolve the width
    (1 / 700 Hz = 1.4 ms).
    """
    generator = np.random.default_rng(2)
    middle_s = float(true_s(np.array([3500.0]))[0]) - 0.5
    pulls = []
    for _ in range(30):
        shares = generator.normal(0.0, spread_s / middle_s, 20)
        wave = dispersed(
            lambda f: true_s(f) - 0.5,
            band_hz=BAND_HZ,
            duration_s=4.0,
            shares=shares,
            generator=generator,
        )
        wave = np.roll(wave, 12_000)  # half a second, which does not spread
        audio = in_noise(wave, cell_snr_db=18.0, generator=generator)
        view = straighten(audio, true_s, band_hz=BAND_HZ, spacing_hz=700.0)
        assert view is not None
        travel_s = true_s(view.frequency_hz) - 0.5
        aligned = align(view, travel_s, search_s=0.004, thickness_s=spread_s)
        pulls.append(np.median(aligned.lag_s / travel_s) / aligned.centre_share_sd)
    assert 0.7 < np.sqrt(np.mean(np.square(pulls))) < 1.4


@pytest.mark.parametrize("sigma_s", [0.008, 0.015, 0.03])
def test_coarse_thickness_of_diffuse_traces(sigma_s: float) -> None:
    """Recovery: the rms width of a stack of speckled Gaussian envelopes, to 25 %; 0 for noise-thin.

    The half-power width is read, of a mean over 20 sub-bands of some 10 speckles each.
    """
    generator = np.random.default_rng(3)
    lag_s = np.arange(-0.15, 0.15, 1e-4)
    found = []
    for width_s in [sigma_s] * 8:
        profile = 10.0 * np.exp(-0.5 * (lag_s / width_s) ** 2)
        speckle = generator.exponential(1.0, (20, lag_s.size // 20)).repeat(20, axis=1)
        found.append(
            coarse_thickness(Straightened(profile * speckle + 1.0, np.arange(20.0), lag_s, 300.0))
        )
    assert np.median(found) == pytest.approx(sigma_s, rel=0.25)
    thin = Straightened(
        1.0 + 50.0 * (np.abs(lag_s) < 0.0005) * np.ones((20, 1)), np.arange(20.0), lag_s, 300.0
    )
    assert coarse_thickness(thin) == 0.0


def bundle(
    generator: np.random.Generator, *, width_s: float, peak: float, shift_sd_s: float
) -> tuple[Straightened, np.ndarray, np.ndarray]:
    """Sub-bands of eight sub-paths, at places that scale with travel time, each band shifted.

    Returns the view, the travel times and the shifts at the reference travel time.
    """
    frequency_hz = np.linspace(1200.0, 9000.0, 12)
    travel_s = 1.1 * np.sqrt(2000.0 / frequency_hz)
    stretch = travel_s / np.median(travel_s)
    lag_s = np.arange(-0.08, 0.08, 2e-4)
    offset_hz = np.linspace(-700.0, 700.0, 141)
    window = np.cos(np.pi * offset_hz / 1400.0) ** 2
    carrier = np.exp(np.complex64(2j * np.pi) * np.outer(offset_hz, lag_s)) * window[:, None]
    carrier = np.complex64(carrier)
    place_s = generator.normal(0.0, width_s, 8)
    strength = generator.normal(size=8) + 1j * generator.normal(size=8)
    strength /= np.linalg.norm(strength)
    shift_s = shift_sd_s * generator.standard_normal(12)
    spectra = []
    for k in range(12):
        late_s = place_s * stretch[k] + shift_s[k] * stretch[k]
        turn = np.exp(-2j * np.pi * np.outer(late_s, offset_hz + frequency_hz[k]))
        noise = generator.standard_normal((2, len(offset_hz))) * np.sqrt(0.5)
        noise /= np.linalg.norm(window)
        spectrum = np.sqrt(peak) * (strength @ turn) / window.sum() + noise[0] + 1j * noise[1]
        spectra.append(spectrum)
    rows = np.abs(np.complex64(spectra) @ carrier) ** 2
    return Straightened(rows, frequency_hz, lag_s, 0.75 * 700.0), travel_s, shift_s


@pytest.mark.parametrize("width_s", [0.0005, 0.001, 0.002, 0.004])
def test_bundles_are_aligned(width_s: float) -> None:
    """Recovery: shifts of 0.3 ms between ragged sub-bands come back to 0.2 ms at 20 dB.

    Resolution is 1.4 ms; timing each band on its own centre would leave the speckle of the bundle,
    `width_s` over the root of its cells. The typical error is below the stated sigma, one in ten
    is three times as large: bands that hardly look alike, which the fit drops or allows for.
    """
    errors, pulls = [], []
    for seed in range(16):
        view, travel_s, shift_s = bundle(
            np.random.default_rng(seed), width_s=width_s, peak=100.0, shift_sd_s=3e-4
        )
        aligned = align(view, travel_s, search_s=0.004, thickness_s=width_s)
        kept = aligned.correlation >= 0.5
        assert kept.sum() >= 8
        error = aligned.lag_s / travel_s * np.median(travel_s) - shift_s
        error -= np.median(error[kept])  # where the bundle sits as a whole is another question
        errors.append(error[kept])
        pulls.append((error / aligned.lag_sd_s(view.band_width_hz))[kept])
    error, pull = np.concatenate(errors), np.concatenate(pulls)
    assert np.median(np.abs(error)) < 2e-4
    assert np.median(np.abs(pull)) / 0.6745 < 1.2
    assert np.mean(np.abs(pull) < 3.0) > 0.9


def test_the_middle_of_a_bundle_is_as_uncertain_as_stated() -> None:
    """Recovery: the centre of 40 bundles against what their sub-paths scatter about.

    The stated sigma is that of a mean over independent cells, set for ducts of many equal
    sub-paths. Eight of random strength, as here, are harder: right within a factor of two.
    """
    pulls = []
    for seed in range(40):
        view, travel_s, _ = bundle(
            np.random.default_rng(seed), width_s=0.003, peak=100.0, shift_sd_s=0.0
        )
        aligned = align(view, travel_s, search_s=0.004, thickness_s=0.003)
        centre_share = np.median(aligned.lag_s / travel_s)
        pulls.append(centre_share / aligned.centre_share_sd)
    assert 0.5 < np.sqrt(np.mean(np.square(pulls))) < 2.0


def test_curve_outside_the_block_and_noise_alone_give_nothing(true_s: Curve) -> None:
    """Identity: no audio under the curve is no trace; noise alone times few sub-bands.

    Of 20, a quarter: each keeps the largest of some 20 cells above a threshold that one cell passes
    once in a few hundred times. Half of the band must be timed for a trace to be borne out.
    """
    noise = clean_audio(np.random.default_rng(5).standard_normal(96_000))
    assert straighten(noise, lambda f: true_s(f) + 9.0, band_hz=BAND_HZ) is None
    view = straighten(noise, true_s, band_hz=BAND_HZ)
    assert view is not None
    assert view.power.mean() == pytest.approx(1.0, abs=0.1)
    reading = read_trace(view, true_s, window_s=0.02)
    assert reading is None or len(reading.snr) <= 6


@pytest.mark.parametrize("cell_snr_db", [6.0, 12.0, 20.0])
def test_strength_along_the_trace(true_s: Curve, cell_snr_db: float) -> None:
    """Recovery: the strength put in, within 1.5 dB: cells are sampled every 4 ms, noise adds."""
    wave = dispersed(true_s, band_hz=BAND_HZ, duration_s=8.0)
    audio = in_noise(wave, cell_snr_db=cell_snr_db, generator=np.random.default_rng(6))
    frequency_hz = np.linspace(*BAND_HZ, 20)
    trace = Trace(frequency_hz, true_s(frequency_hz), np.full(20, 1e-3))
    measured_db = median_snr_db(spectrogram(audio), trace, curve=true_s)
    assert measured_db == pytest.approx(cell_snr_db, abs=1.5)
