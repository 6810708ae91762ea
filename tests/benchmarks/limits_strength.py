"""Share found against strength: thin traces, and diffuse ones."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from limits_level import level_figures
from limits_run import Job, Options, Part, jobs_until, measure_all
from limits_stats import (
    bins,
    hourly_figure,
    least_hourly_figure,
    logistic,
    resampled,
    share_figure,
)
from promises import Figure
from scoring import Pair, Summary, campaign_scene, describe_extra, describe_pair

from whistler.synthesis.draw import Campaign
from whistler.synthesis.scene import Scene

THIN = Campaign(
    l_range=(2.0, 4.5),
    snr_range_db=(-4.0, 8.0),
    low_range_hz=(800.0, 1500.0),
    spread_range_s=(0.0003, 0.002),
    path_shares=(1.0, 0.0, 0.0),
    hop_shares=(0.9, 0.1, 0.0, 0.0, 0.0),
    pause_range_s=(1.0, 3.0),
)
# Seeds after the campaign's first, band and thickness of diffuse traces.
DIFFUSE_AFTER = 1000
DIFFUSE = Campaign(
    l_range=(2.0, 4.0),
    snr_range_db=(0.0, 12.0),
    low_range_hz=(700.0, 700.0),
    high_hz=6000.0,
    spread_range_s=(0.025, 0.025),
    path_shares=(1.0, 0.0, 0.0),
    hop_shares=(1.0, 0.0, 0.0, 0.0, 0.0),
    pause_range_s=(1.0, 3.0),
)
SFERICS_HZ = (5.0, 80.0)
LEAST = 500  # injections of a full campaign
PROMISED_DB = 6.0
L_EDGES = (2.0, 2.8, 3.6, 4.5)
SURE_DB = 5.0  # from here nothing may be missed
THIN_NOTE = (
    "Strength: `whistler/synthesis/level.py`. The noise is the background's with its sferics and "
    "hum, by the median, and so a little above the quiet noise."
)

DIFFUSE_NOTE = (
    "Strength of a diffuse trace: the median over channels of the power in the one cell centred on "
    "the mean arrival, as for thin ones. Its sub-paths speckle it and spread it over many cells: "
    "the mean over channels lies 3.4 dB above that median (2.4 dB for thin traces), and all cells "
    "of a channel together hold 10 dB more than that median (thin: 1.5 dB)."
)


def thin_scene(seed: int) -> Scene:
    """A minute of thin, mostly one-hop whistlers, one path for each stroke."""
    return campaign_scene(seed, campaign=THIN)


def strength(options: Options) -> Part:
    """Share found of thin traces against strength and L, and false rows among them."""
    seeds = range(options.first_seed, options.first_seed + 1000)
    jobs = jobs_until(thin_scene, seeds, least=options.amount(600, quick=60))
    summary = measured(jobs, options, name="strength")
    curve = curve_figures(summary.pairs, ((0.5, 0.0), (0.9, 2.0)))
    figures = [
        Figure("injections", len(summary.pairs), -np.inf if options.quick else LEAST, unit=""),
        *curve,
        found_figure("found at +5 dB and above", summary.pairs, (SURE_DB, 99.0), low=99.0),
        *binned_figures(summary.pairs, (-4, -2, -1, 0, 1, 2, 3, 5, 8)),
        *l_figures(summary.pairs),
        hourly_figure("rows without a true trace", len(summary.extra), summary.minutes, high=1.0),
        *level_figures([job.scene for job in jobs[: options.amount(6, quick=2)]]),
    ]
    return Part(
        "Strength, thin traces (20 sferics/s, hum)",
        tuple(figures),
        notes=(THIN_NOTE,),
        oddities=tuple(odd_ones(summary, from_db=2.0)),
    )


def diffuse_scene(seed: int) -> Scene:
    """A minute of thick one-hop whistlers below 6 kHz under sparse to dense sferics."""
    rate_hz = np.exp(np.random.default_rng([seed, 2]).uniform(*np.log(SFERICS_HZ)))
    return campaign_scene(seed, campaign=replace(DIFFUSE, sferic_rate_hz=round(float(rate_hz), 1)))


def diffuse(options: Options) -> Part:
    """Share found of diffuse traces against strength."""
    begin = options.first_seed + DIFFUSE_AFTER
    least = options.amount(240, quick=50)
    jobs = jobs_until(diffuse_scene, range(begin, begin + 1000), least=least)
    summary = measured(jobs, options, name="diffuse")
    figures = [
        Figure("injections", len(summary.pairs), unit=""),
        share_at(summary.pairs, PROMISED_DB, low=90.0),
        *curve_figures(summary.pairs, ((0.9, np.inf),)),  # half lies below the range
        *binned_figures(summary.pairs, (0, 2, 4, 6, 8, 10, 12)),
        *rate_figures(jobs, summary.pairs),
        least_hourly_figure(
            "rows without a true trace", len(summary.extra), summary.minutes, high=1.0
        ),
    ]
    return Part(
        "Strength, diffuse traces (25 ms spread, 0.7-6 kHz, 5-80 sferics/s)",
        tuple(figures),
        notes=(DIFFUSE_NOTE,),
        oddities=tuple(odd_ones(summary, from_db=PROMISED_DB)),
    )


def share_at(pairs: tuple[Pair, ...], strength_db: float, *, low: float) -> Figure:
    """Share found at one strength, by a logistic curve."""
    snr_db, found, seed = strengths(pairs)

    def share(index: np.ndarray) -> list[float]:
        return [100.0 * logistic(snr_db[index], found[index]).share(strength_db)]

    value = share(np.arange(snr_db.size))[0]
    interval = resampled(seed, share)[0]
    return Figure(f"found at {strength_db:+g} dB, by the curve", value, low, interval=interval)


def rate_figures(jobs: list[Job], pairs: tuple[Pair, ...]) -> list[Figure]:
    """Share found at +4 dB and above, under sparse and under dense sferics."""
    rates_hz = {job.seed: job.scene.sferics[0].rate_hz for job in jobs}
    strong = [pair for pair in pairs if pair.truth.snr_db >= 4.0]
    rate_hz = np.array([rates_hz[pair.seed] for pair in strong])
    found = np.array([pair.row is not None for pair in strong])
    return [
        share_figure(f"found at +4 dB and above under {low:g} to {high:g} sferics/s", found[inside])
        for low, high, inside in bins((SFERICS_HZ[0], 20.0, SFERICS_HZ[1]), rate_hz)
    ]


def measured(jobs: list[Job], options: Options, *, name: str) -> Summary:
    """All scenes measured and gathered."""
    return Summary.of(measure_all(jobs, options, name=name))


def strengths(pairs: tuple[Pair, ...]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Strength, found or not, and seed of every injection."""
    return (
        np.array([pair.truth.snr_db for pair in pairs]),
        np.array([pair.row is not None for pair in pairs]),
        np.array([pair.seed for pair in pairs]),
    )


def curve_figures(pairs: tuple[Pair, ...], wanted: tuple[tuple[float, float], ...]) -> list[Figure]:
    """Strengths at which shares are found, by a logistic curve, beside their limits."""
    snr_db, found, seed = strengths(pairs)
    shares = [share for share, _ in wanted]

    def at_shares(index: np.ndarray) -> list[float]:
        curve = logistic(snr_db[index], found[index])
        return [curve.strength_db(share) for share in shares]

    values = at_shares(np.arange(snr_db.size))
    intervals = resampled(seed, at_shares)
    return [
        Figure(f"strength where {100 * share:.0f} % are found", value, -np.inf, high, "dB", ends)
        for (share, high), value, ends in zip(wanted, values, intervals, strict=True)
    ]


def found_figure(
    name: str, pairs: tuple[Pair, ...], range_db: tuple[float, float], *, low: float = -np.inf
) -> Figure:
    """Share found of the injections within a range of strength."""
    snr_db, found, _ = strengths(pairs)
    inside = (snr_db >= range_db[0]) & (snr_db < range_db[1])
    return share_figure(name, found[inside], low=low)


def binned_figures(pairs: tuple[Pair, ...], edges_db: tuple[float, ...]) -> list[Figure]:
    """Share found in bins of strength."""
    snr_db, found, _ = strengths(pairs)
    return [
        share_figure(f"found at {low:+g} to {high:+g} dB", found[inside])
        for low, high, inside in bins(edges_db, snr_db)
    ]


def l_figures(pairs: tuple[Pair, ...]) -> list[Figure]:
    """Share found, and strength where half are, in bins of L."""
    snr_db, found, _ = strengths(pairs)
    l_value = np.array([pair.truth.l_value for pair in pairs])
    figures = []
    for low, high, inside in bins(L_EDGES, l_value):
        figures.append(share_figure(f"found at L {low:g} to {high:g}", found[inside]))
        if inside.sum() >= 10:
            curve = logistic(snr_db[inside], found[inside])
            for share in (0.5, 0.9):
                name = f"strength where {100 * share:.0f} % are found, L {low:g} to {high:g}"
                figures.append(Figure(name, curve.strength_db(share), unit="dB"))
    return figures


def odd_ones(summary: Summary, *, from_db: float) -> list[str]:
    """What was missed though strong, and every row without a true trace."""
    lines = [
        describe_pair(pair)
        for pair in summary.pairs
        if pair.row is None and pair.truth.snr_db >= from_db
    ]
    return [*lines, *map(describe_extra, summary.extra)]
