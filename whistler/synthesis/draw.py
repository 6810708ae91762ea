"""Scenes with parameters drawn at random, for measurement campaigns."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from fieldlines.climatology import saturated_density
from whistler.synthesis.parts import (
    Chorus,
    Hiss,
    Mains,
    Noise,
    Receiver,
    Sferics,
    Transmitter,
)
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Medium, Path, Stroke
from whistler.synthesis.wave import prepare_ray

#: Hops heard from one stroke, and how often: one-hop whistlers are the common case.
HOP_CHOICES: tuple[tuple[int, ...], ...] = ((1,), (2,), (1, 3), (1, 3, 5), (2, 4))
HOP_SHARES = (0.72, 0.10, 0.09, 0.06, 0.03)
#: Traces of neighbouring paths are told apart when their L differ by this much.
LEAST_L_STEP = 0.25


@dataclass(frozen=True)
class Campaign:
    """Ranges from which whistlers are drawn.

    Parameters
    ----------
    l_range, snr_range_db, low_range_hz, spread_range_s : tuple of float
        Uniform ranges of L, of the cell SNR of every trace, of the lower band limit, and of the
        duct spread (uniform in the logarithm).
    density_sd_dex : float
        Scatter of the density about the climatology, decades, common to all paths of a stroke.
    offset_sd_m : float
        Scatter of the stroke's distance about nominal, m.
    hidden_share : float
        Share of strokes whose own sferic is not heard.
    sferic_rate_hz : float
        Background sferics a second.
    medium : Medium
        What the whistlers travel through.
    path_shares, hop_shares : tuple of float
        How often one, two or three paths are lit, and each of `HOP_CHOICES`.
    pause_range_s : tuple of float
        Uniform range of the pause between the end of one stroke's traces and the next stroke, s.
    high_hz : float or None
        Upper band limit where half the equatorial gyrofrequency is above it; None is 9.5 kHz.
    """

    l_range: tuple[float, float] = (2.2, 4.6)
    snr_range_db: tuple[float, float] = (10.0, 22.0)
    low_range_hz: tuple[float, float] = (800.0, 2000.0)
    spread_range_s: tuple[float, float] = (0.0005, 0.005)
    density_sd_dex: float = 0.15
    offset_sd_m: float = 400e3
    hidden_share: float = 0.1
    sferic_rate_hz: float = 20.0
    medium: Medium = field(default_factory=Medium)
    path_shares: tuple[float, ...] = (0.6, 0.25, 0.15)
    hop_shares: tuple[float, ...] = HOP_SHARES
    pause_range_s: tuple[float, float] = (0.2, 2.0)
    high_hz: float | None = None


def draw_scene(
    generator: np.random.Generator,
    *,
    campaign: Campaign | None = None,
    duration_s: float = 60.0,
    sample_rate_hz: int = 32_000,
    name: str = "draw",
) -> Scene:
    """Return a scene with several strokes whose whistlers do not overlap with the next stroke's.

    Parameters
    ----------
    generator : numpy.random.Generator
        Source of the draws.
    campaign : Campaign or None
        Ranges; None takes the defaults.
    duration_s : float
        Length, s.
    sample_rate_hz : int
        Sampling rate.
    name : str
        Name of the recording.

    Returns
    -------
    Scene
        Every trace lies inside the recording.

    Examples
    --------
    >>> scene = draw_scene(np.random.default_rng(1))
    >>> 3 <= len(scene.strokes) <= 40
    True
    """
    ranges = Campaign() if campaign is None else campaign
    strokes: list[Stroke] = []
    time_s = generator.uniform(0.3, 1.5)
    for _ in range(1000):
        stroke = draw_stroke(generator, campaign=ranges, lightning_time_s=time_s)
        end_s = time_s + longest_delay(stroke, medium=ranges.medium)
        if end_s + 0.3 > duration_s:
            break
        strokes.append(stroke)
        time_s = end_s + generator.uniform(*ranges.pause_range_s)
    return Scene(
        duration_s=duration_s,
        sample_rate_hz=sample_rate_hz,
        seed=int(generator.integers(2**31)),
        name=name,
        shows=f"{sum(len(stroke.paths) for stroke in strokes)} paths drawn at random",
        medium=ranges.medium,
        strokes=tuple(strokes),
        noise=Noise(atmospheric_db=float(generator.uniform(5.0, 12.0))),
        sferics=(draw_sferics(generator, rate_hz=ranges.sferic_rate_hz),),
        mains=draw_mains(generator),
    )


def draw_stroke(
    generator: np.random.Generator, *, campaign: Campaign, lightning_time_s: float
) -> Stroke:
    """Return a stroke with one to three paths.

    Parameters
    ----------
    generator : numpy.random.Generator
        Source of the draws.
    campaign : Campaign
        Ranges.
    lightning_time_s : float
        Time of the stroke, s.

    Returns
    -------
    Stroke
        Its paths share the hops and their density's departure from the climatology.
    """
    hops = HOP_CHOICES[int(generator.choice(len(HOP_CHOICES), p=campaign.hop_shares))]
    most_paths = 3 if len(hops) == 1 else 2
    count = int(generator.choice([1, 2, 3], p=campaign.path_shares))
    common_dex = generator.normal(0.0, campaign.density_sd_dex)
    low_hz = float(generator.uniform(*campaign.low_range_hz))
    paths = [
        _draw_path(generator, campaign, float(l_value), common_dex, hops, low_hz)
        for l_value in _spaced_l(generator, campaign.l_range, min(count, most_paths))
    ]
    heard = generator.random() >= campaign.hidden_share
    strength = float(generator.uniform(1.0, 3.0))
    offset_m = campaign.offset_sd_m * generator.normal()
    if hops[0] % 2 == 0:
        offset_m = generator.uniform(-130e3, 150e3)
    return Stroke(
        lightning_time_s=round(lightning_time_s, 4),
        paths=tuple(paths),
        sferic_strength=round(strength, 2) if heard else 0.0,
        distance_offset_m=round(float(offset_m)),
    )


def longest_delay(stroke: Stroke, *, medium: Medium) -> float:
    """Return the time from a stroke to the end of its last trace, s.

    Parameters
    ----------
    stroke : Stroke
        The stroke.
    medium : Medium
        What its paths run through.

    Returns
    -------
    float
        Largest delay of all paths and hops at either band limit, s.
    """
    model = medium.field_line_model()
    delays = []
    for path in stroke.paths:
        ray = prepare_ray(path, model=model)
        limits = np.array([ray.low_hz, ray.high_hz])
        delays.append(max(path.hops) * float(np.max(ray.phase.group_delay(limits))))
    return max(delays)


def _spaced_l(
    generator: np.random.Generator, l_range: tuple[float, float], count: int
) -> list[float]:
    while True:
        values = np.sort(generator.uniform(*l_range, count))
        if count == 1 or np.diff(values).min() >= LEAST_L_STEP:
            return [round(float(value), 4) for value in values]


def _draw_path(
    generator: np.random.Generator,
    campaign: Campaign,
    l_value: float,
    common_dex: float,
    hops: tuple[int, ...],
    low_hz: float,
) -> Path:
    density_cm3 = float(saturated_density(l_value)) * 1e-6
    density_cm3 *= 10.0 ** (common_dex + generator.normal(0.0, 0.03))
    loss_db = float(generator.uniform(1.0, 2.5))
    lowest_db, highest_db = campaign.snr_range_db
    weakest_first_db = min(lowest_db + loss_db * (hops[-1] - hops[0]), highest_db)
    spread = np.exp(generator.uniform(*np.log(campaign.spread_range_s)))
    high_hz = campaign.high_hz
    if high_hz is not None:
        dipole = campaign.medium.field_line_model().dipole
        high_hz = min(high_hz, round(0.5 * dipole.equatorial_gyrofrequency(l_value), 1))
    return Path(
        l_value=l_value,
        equatorial_density_cm3=round(density_cm3, 2),
        snr_db=round(float(generator.uniform(weakest_first_db, highest_db)), 2),
        hops=hops,
        hop_loss_db=round(loss_db, 2),
        frequency_low_hz=round(low_hz * float(np.exp(generator.normal(0.0, 0.05))), 1),
        frequency_high_hz=high_hz,
        tilt_db_per_octave=round(float(generator.normal(0.0, 1.5)), 2),
        spread_s=round(float(spread), 5),
        fading_depth=round(float(generator.uniform(0.1, 0.5)), 2),
        fading_scale_hz=round(float(generator.uniform(400.0, 1500.0))),
    )


def draw_sferics(generator: np.random.Generator, *, rate_hz: float) -> Sferics:
    """Return a population of sferics with drawn strength, distances and guide height.

    Parameters
    ----------
    generator : numpy.random.Generator
        Source of the draws.
    rate_hz : float
        Number a second.

    Returns
    -------
    Sferics
        The population.
    """
    return Sferics(
        rate_hz=rate_hz,
        median_peak=round(float(generator.uniform(20.0, 60.0)), 1),
        spread_db=round(float(generator.uniform(6.0, 8.0)), 1),
        clustering=round(float(generator.uniform(0.1, 0.5)), 2),
        reflection_height_m=round(float(generator.uniform(80e3, 90e3))),
        tweek_db=round(float(generator.uniform(-35.0, -18.0)), 1),
    )


def draw_mains(generator: np.random.Generator) -> Mains:
    """Return 50 or 60 Hz hum with drawn drift and level.

    Parameters
    ----------
    generator : numpy.random.Generator
        Source of the draws.

    Returns
    -------
    Mains
        The hum.
    """
    return Mains(
        frequency_hz=float(generator.choice([50.0, 60.0])),
        drift_hz=round(float(generator.uniform(0.0, 0.1)), 3),
        level=round(float(np.exp(generator.uniform(np.log(3.0), np.log(30.0)))), 2),
        harmonics=int(generator.integers(20, 60)),
    )


def draw_decoy_scene(
    generator: np.random.Generator,
    *,
    duration_s: float = 60.0,
    sample_rate_hz: int = 32_000,
    name: str = "decoy",
    thunder: bool = False,
) -> Scene:
    """Return a scene without any whistler but with much that may be taken for one.

    Parameters
    ----------
    generator : numpy.random.Generator
        Source of the draws.
    duration_s : float
        Length, s.
    sample_rate_hz : int
        Sampling rate.
    name : str
        Name of the recording.
    thunder : bool
        Whether a thunderstorm near by drives the receiver into clipping, too.

    Returns
    -------
    Scene
        Chorus, hiss, sferics at 3 to 80 a second, tweek storms, load switchings, a transmitter.

    Examples
    --------
    >>> draw_decoy_scene(np.random.default_rng(1)).strokes
    ()
    """
    rate_hz = float(np.exp(generator.uniform(np.log(3.0), np.log(80.0))))
    mains = draw_mains(generator)
    scene = Scene(
        duration_s=duration_s,
        sample_rate_hz=sample_rate_hz,
        seed=int(generator.integers(2**31)),
        name=name,
        shows="decoys only",
        noise=Noise(atmospheric_db=float(generator.uniform(5.0, 12.0))),
        sferics=(
            draw_sferics(generator, rate_hz=round(rate_hz, 2)),
            _draw_tweek_storm(generator, duration_s),
        ),
        mains=Mains(
            frequency_hz=mains.frequency_hz,
            drift_hz=mains.drift_hz,
            level=mains.level,
            harmonics=mains.harmonics,
            steps_per_minute=float(generator.uniform(0.0, 8.0)),
        ),
        hiss=(_draw_hiss(generator),),
        chorus=(_draw_chorus(generator),),
        transmitters=(_draw_transmitter(generator),),
    )
    if not thunder:
        return scene
    storm = _draw_thunder(generator)
    full_scale = round(storm.median_peak * float(generator.uniform(0.3, 1.0)))
    return replace(scene, sferics=(*scene.sferics, storm), receiver=Receiver(full_scale=full_scale))


def _draw_tweek_storm(generator: np.random.Generator, duration_s: float) -> Sferics:
    length_s = float(generator.uniform(0.2, 0.6)) * duration_s
    return Sferics(
        rate_hz=round(float(generator.uniform(1.0, 8.0)), 2),
        median_peak=round(float(generator.uniform(40.0, 120.0)), 1),
        near_m=1500e3,
        far_m=6000e3,
        reflection_height_m=round(float(generator.uniform(82e3, 90e3))),
        tweek_db=round(float(generator.uniform(-12.0, 0.0)), 1),
        start_s=round(float(generator.uniform(0.0, duration_s - length_s)), 2),
        duration_s=round(length_s, 2),
    )


def _draw_thunder(generator: np.random.Generator) -> Sferics:
    return Sferics(
        rate_hz=round(float(np.exp(generator.uniform(np.log(0.3), np.log(4.0)))), 2),
        median_peak=round(float(np.exp(generator.uniform(np.log(300.0), np.log(3000.0))))),
        clustering=0.7,
        near_m=20e3,
        far_m=200e3,
    )


def _draw_hiss(generator: np.random.Generator) -> Hiss:
    low_hz = float(generator.uniform(600.0, 3000.0))
    return Hiss(
        low_hz=round(low_hz),
        high_hz=round(low_hz * float(generator.uniform(1.3, 2.5))),
        level_db=round(float(generator.uniform(3.0, 15.0)), 1),
        modulation=round(float(generator.uniform(0.1, 0.5)), 2),
    )


def _draw_chorus(generator: np.random.Generator) -> Chorus:
    return Chorus(
        rate_hz=round(float(generator.uniform(0.3, 3.0)), 2),
        low_hz=800.0,
        high_hz=round(float(generator.uniform(2500.0, 5000.0))),
        level_db=round(float(generator.uniform(12.0, 24.0)), 1),
        falling_share=round(float(generator.uniform(0.2, 0.6)), 2),
    )


def _draw_transmitter(generator: np.random.Generator) -> Transmitter:
    keying = str(generator.choice(["steady", "keyed", "swept"]))
    return Transmitter(
        frequency_hz=round(float(generator.uniform(2500.0, 9000.0)), 1),
        level_db=round(float(generator.uniform(10.0, 30.0)), 1),
        keying=keying,
        period_s=round(float(generator.uniform(0.8, 6.0)), 2),
        span_hz=round(float(generator.uniform(-1800.0, 1800.0))),
    )
