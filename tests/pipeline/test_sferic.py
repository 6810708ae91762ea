"""Which sferic it was: the mixture's rules and calibration, the guide's lag, fronts and ways."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from makers import block

from fieldlines import FieldLineModel, saturated_density
from whistler.cleaning import clean
from whistler.evidence import STORM_SHARE, Reading, Surroundings, weigh
from whistler.fit import StrokeFit
from whistler.problem import sferic_path_s
from whistler.settings import Settings
from whistler.sferic import (
    CAUSE_STRONGER,
    CAUSE_UNSEEN,
    GUIDE_HEIGHT_M,
    READING_SD_S,
    SfericCatalogue,
    front_lag_s,
    possible_causes,
)
from whistler.synthesis.quick import quick_scene
from whistler.synthesis.render import render


def catalogue(time_s: list[float], amplitude: list[float], duration_s: float) -> SfericCatalogue:
    return SfericCatalogue(np.array(time_s), np.array(amplitude), duration_s)


L_VALUE = 2.8


def read(
    model: FieldLineModel,
    seen: SfericCatalogue,
    *,
    late_s: float = 0.0,
    departure: float = 0.0,
    density_sd: float = 0.1,
    sd_s: float = 0.002,
    correlation: float = 0.0,
    hops: int = 2,
    prior: str = "none",
) -> Reading:
    """What `weigh` makes of a fit of L 2.8 that is `late_s` late, its ln density off the prior.

    `sd_s` is the one-sigma of where the sferic must be, its reading included.
    """
    time_sd_s = np.sqrt(sd_s**2 - READING_SD_S**2)
    covariance = np.zeros((3, 3))
    covariance[1, 1], covariance[2, 2] = density_sd**2, time_sd_s**2
    covariance[1, 2] = covariance[2, 1] = correlation * density_sd * time_sd_s
    fit = StrokeFit(
        log_l=np.log([L_VALUE]),
        log_density=np.log([float(saturated_density(L_VALUE))]) + departure,
        lightning_time_s=late_s,
        covariance=covariance,
        rms_s=np.zeros(1),
        chi_square=1.0,
        freedom=1,
        converged=True,
        at_bound=np.zeros(1, bool),
        tie_misfit=0.0,
        used=(),
        model=model,
        open_sigmas=np.zeros(0),
        total_covariance=covariance,
    )
    settings = Settings(stroke_distance_sd_m=0.0, density_prior=prior)
    return weigh(fit, hops, around=Surroundings(seen, model, settings))


def test_odds_follow_the_formula(model: FieldLineModel) -> None:
    """Reference (worked by hand): two equal sferics, one on the spot and one a sigma away.

    Background 2 / 0.5 s = 4 a second; density on the spot 1 / (sqrt(2 pi) 2 ms) = 199.5 a second;
    equal amplitudes cancel up to the shift of half of what causes are stronger by.
    """
    seen = catalogue([0.200, 0.202], [10.0, 10.0], 0.5)
    causes = possible_causes(seen, predicted_s=0.2, sd_s=0.002)
    spread = 0.3  # the least that is allowed for in ln amplitude
    amplitude = np.exp(max(-0.5 * CAUSE_STRONGER**2 / spread**2, -2.5))
    prior = (1.0 - CAUSE_UNSEEN) / CAUSE_UNSEEN
    wanted = prior * 199.5 / 4.0 * amplitude * np.array([1.0, np.exp(-0.5)])
    np.testing.assert_allclose(causes.odds, wanted, rtol=1e-3)
    reading = read(model, seen, late_s=0.2)
    assert reading.best_cause == 0
    assert reading.cause_probability == pytest.approx(wanted[0] / (1.0 + wanted.sum()), rel=1e-3)


def test_the_likeliest_shares_the_certainty_with_all_and_none(model: FieldLineModel) -> None:
    """Identity: its part of all odds and "none of those"; sferics far off take no part."""
    generator = np.random.default_rng(1)
    for _ in range(20):
        count = int(generator.integers(0, 40))
        seen = SfericCatalogue(
            np.sort(generator.uniform(0, 1, count)), generator.lognormal(2, 0.8, count), 1.0
        )
        causes = possible_causes(seen, predicted_s=0.5, sd_s=0.01)
        assert np.all(np.abs(causes.time_s - 0.5) <= 0.04)
        np.testing.assert_array_equal(causes.time_s, seen.time_s[causes.index])
        reading = read(model, seen, late_s=0.5, sd_s=0.01)
        if causes.odds.size:
            best = int(np.argmax(causes.odds))
            wanted = causes.odds[best] / (1.0 + causes.odds.sum())
            assert reading.best_cause == causes.index[best]
            assert reading.cause_probability == pytest.approx(wanted, abs=1e-12)
    lone = read(model, catalogue([], [], 1.0), late_s=0.5, sd_s=0.01)
    assert (lone.best_cause, lone.cause_probability) == (-1, 0.0)


@pytest.mark.parametrize("prior", ["none", "saturated"])
@pytest.mark.parametrize(("rate_hz", "sd_s"), [(5.0, 0.003), (20.0, 0.003), (20.0, 0.015)])
def test_probabilities_are_calibrated(
    model: FieldLineModel, rate_hz: float, sd_s: float, prior: str
) -> None:
    """Recovery: of 3000 likeliest sferics, of those called p % likely, p % are the cause.

    Drawn are a density from the prior, a fit whose time and density err together, a Poisson
    background with lognormal amplitudes of 0.8 in ln, the cause stronger by the stated 0.7 and
    unseen in the stated share, its front read with the stated scatter. In each of five ranges of p
    the share of true causes lies within four sigma of a binomial plus 0.06: the law takes the
    amplitudes' mean and spread from the catalogue itself, which holds the cause too.
    """
    generator = np.random.default_rng(2)
    time_sd_s, density_sd, correlation = np.sqrt(sd_s**2 - READING_SD_S**2), 0.8, 0.9
    prior_sd = Settings().density_prior_sd_dex * np.log(10.0)
    way_s = sferic_path_s(L_VALUE)
    heard_s = way_s + front_lag_s(way_s, front_hz=11_000.0)
    share, hit = np.zeros(3000), np.zeros(3000, bool)
    for trial in range(3000):
        count = generator.poisson(rate_hz * 10.0)
        time_s = generator.uniform(-5.0, 5.0, count)
        amplitude = np.exp(generator.normal(2.0, 0.8, count))
        cause = -2
        if generator.random() > CAUSE_UNSEEN:
            time_s = np.append(time_s, heard_s + READING_SD_S * generator.standard_normal())
            amplitude = np.append(amplitude, np.exp(generator.normal(2.0 + CAUSE_STRONGER, 0.8)))
            cause = count
        storm = 3.0 if generator.random() < STORM_SHARE else 1.0
        one, other = generator.standard_normal(2)
        error = density_sd * (correlation * one + np.sqrt(1.0 - correlation**2) * other)
        reading = read(
            model,
            SfericCatalogue(time_s, amplitude, 10.0),
            late_s=time_sd_s * one,
            departure=storm * prior_sd * generator.standard_normal() + error,
            density_sd=density_sd,
            sd_s=sd_s,
            correlation=correlation,
            hops=1,
            prior=prior,
        )
        share[trial], hit[trial] = reading.cause_probability, reading.best_cause == cause
    judged = 0
    for low, high in ((0.02, 0.2), (0.2, 0.5), (0.5, 0.8), (0.8, 0.95), (0.95, 1.0)):
        inside = (share >= low) & (share < high)
        if inside.sum() < 20:
            continue
        judged += 1
        wanted = share[inside].mean()
        scatter = np.sqrt(wanted * (1 - wanted) / inside.sum())
        assert hit[inside].mean() == pytest.approx(wanted, abs=4 * scatter + 0.06), (low, high)
    assert judged >= 3
    assert share.sum() == pytest.approx(hit.sum(), rel=0.06)


def test_front_lags_as_the_guide_says() -> None:
    """Reference (flat waveguide, from first principles): group delay of mode 1 by differences.

    The phase constant is 2 pi / c sqrt(f^2 - fc^2) with fc = c / 2h; its derivative at the leading
    frequency, over the way, less the way at the speed of light. To 1e-6: the difference quotient.
    """
    c = 299_792_458.0
    way_m = 11_000e3
    cutoff_hz = c / (2 * GUIDE_HEIGHT_M)
    assert 1650 < cutoff_hz < 1850  # where tweeks hang, from memory

    def phase(frequency_hz: float) -> float:
        return 2 * np.pi * way_m / c * np.sqrt(frequency_hz**2 - cutoff_hz**2)

    step_hz = 0.5
    delay_s = (phase(11_000.0 + step_hz) - phase(11_000.0 - step_hz)) / (4 * np.pi * step_hz)
    assert front_lag_s(way_m / c, front_hz=11_000.0) == pytest.approx(delay_s - way_m / c, rel=1e-6)
    assert front_lag_s(0.0, front_hz=11_000.0) == 0.0


def test_way_of_the_sferic() -> None:
    """Reference (great circle of 40 030 km, radius 6371.2 km): L 2 to 5 take 33 to 47 ms.

    L 2 has its feet at 45 deg: a quarter of the circle apart, 10 008 km. L 4 at 60 deg: a third.
    """
    circle_s = 2 * np.pi * 6371.2e3 / 299_792_458.0
    assert sferic_path_s(2.0) == pytest.approx(circle_s / 4, rel=1e-6)
    assert sferic_path_s(4.0) == pytest.approx(circle_s / 3, rel=1e-6)
    assert sferic_path_s(np.array([1.5, 2.5])) == sferic_path_s(2.0)
    ways_s = [sferic_path_s(l_value) for l_value in np.linspace(2.0, 5.0, 13)]
    assert np.all(np.diff(ways_s) > 0)
    assert 0.030 < ways_s[0] < ways_s[-1] < 0.048


@pytest.mark.parametrize("strength", [1.0, 10.0, 300.0])
@pytest.mark.parametrize("hops", [1, 2])
def test_fronts_of_sferics_are_read(hops: int, strength: float) -> None:
    """Recovery: near strokes to 0.3 ms; from the conjugate point late by the guide's lag.

    Whatever the strength: the front of one 5000 sigma high must not be read where the zero-phase
    filters ring ahead of it. Of the lag, a weak front shows up to twice; 0.4 ms are allowed.
    """
    scene = quick_scene(
        2.6,
        equatorial_density_cm3=1300.0,
        hops=(hops,),
        duration_s=8.0,
        sample_rate_hz=32_000,
        seed=4,
    )
    (stroke,) = scene.strokes
    scene = replace(
        scene,
        strokes=(replace(stroke, sferic_strength=strength),),
        sferics=(replace(scene.sferics[0], rate_hz=1.0),),
    )
    recording = render(scene)
    (truth,) = recording.truth.whistlers
    audio = clean(block(recording.samples, 32_000), settings=Settings())
    late_s = audio.sferics.time_s - truth.sferic_time_s
    read_s = float(late_s[np.argmin(np.abs(late_s))])
    lag_s = (
        front_lag_s(truth.sferic_time_s - truth.lightning_time_s, front_hz=11_000.0)
        if hops == 1
        else 0.0
    )
    assert read_s == pytest.approx(lag_s, abs=3e-4 if hops == 2 else 4e-4)
