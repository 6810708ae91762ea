"""Which rows belong to one stroke, over how many hops, and which sferic it was."""

from __future__ import annotations

import itertools
import math
import tempfile
from collections import Counter, defaultdict
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
from limits_run import Job, Options, Part, jobs_until, shared_out
from limits_stats import (
    bins,
    calibration_figure,
    exact_interval,
    least_hourly_figure,
    share_figure,
)
from promises import Figure, Grid
from scoring import SFERIC_S, Pair, Scored, Summary, campaign_scene, describe_pair, heard, score

from whistler.rows import WhistlerRow
from whistler.synthesis.draw import Campaign
from whistler.synthesis.scene import Scene
from whistler.synthesis.truth import WhistlerTruth

AFTER = 6000
CROWDED = Campaign(
    l_range=(2.2, 4.5),
    snr_range_db=(10.0, 20.0),
    path_shares=(0.3, 0.4, 0.3),
    hop_shares=(0.5, 0.1, 0.2, 0.12, 0.08),
    pause_range_s=(-1.0, 1.0),
)
NEAR_S = 5.0  # strokes farther apart than this are not in danger of being joined
SURE = 0.9
MOST_POINTS = 10.0  # between the mean stated probability and the share right
PROBABILITY_EDGES = (0.0, 0.3, 0.5, 0.7, 0.8, 0.9, 0.95, 0.99, 1.0)
CALIBRATION_NOTE = (
    "Below 0.9 a row names no sferic; there the one catalogued nearest the predicted time stands "
    "for the likeliest. A stroke counts once, by the truth most of its rows belong to; right means "
    "within 5 ms of the true arrival."
)
GROUPS_NOTE = (
    "One to three paths and up to five hops a stroke, which begins 1 s before to 1 s after the "
    "last one's traces end; strokes 400 km astray, a tenth of them without sferic, 20 sferics/s. "
    f"Pairs of different strokes count when these are less than {NEAR_S:g} s apart."
)


@dataclass(frozen=True)
class Heard:
    """A recording's score and the times of all sferics catalogued in it."""

    scored: Scored
    sferic_time_s: np.ndarray


@dataclass(frozen=True)
class Stroke:
    """The rows of one group, with the truth that most of them belong to."""

    seed: int
    truth: WhistlerTruth
    row: WhistlerRow
    likeliest_s: float

    @property
    def right(self) -> bool:
        """Whether the likeliest sferic is the true one."""
        return abs(self.likeliest_s - self.truth.sferic_time_s) <= SFERIC_S


def crowded_scene(seed: int) -> Scene:
    """A minute of strokes with several paths and hops, close upon each other."""
    return campaign_scene(seed, campaign=CROWDED)


def measure_heard(job: Job) -> Heard:
    """Measure one scene, keeping its sferics."""
    with tempfile.TemporaryDirectory() as folder:
        truth, measurement = heard(job.scene, folder=Path(folder), settings=job.settings)
    scored = score(truth.whistlers, measurement.rows, seed=job.seed)
    duration_s = job.scene.duration_s
    whole = Scored(job.seed, duration_s, scored.pairs, scored.extra)
    return Heard(whole, measurement.sferics.time_s)


@lru_cache(maxsize=1)
def crowded(options: Options) -> tuple[Heard, ...]:
    """The recordings that both parts of this module look at."""
    begin = options.first_seed + AFTER
    least = options.amount(700, quick=80)
    jobs = jobs_until(crowded_scene, range(begin, begin + 1000), least=least)
    return tuple(shared_out(measure_heard, jobs, options, name="groups"))


def groups(options: Options) -> Part:
    """Shares of pairs of rows rightly and wrongly joined, and of right hop orders."""
    recordings = [one.scored for one in crowded(options)]
    pairs = [pair for one in recordings for pair in one.pairs]
    found = [pair for pair in pairs if pair.row is not None]
    together, apart = joined([one.pairs for one in recordings])
    stated, right = hop_probabilities(found)
    extra = sum(len(one.extra) for one in recordings)
    minutes = Summary.of(recordings).minutes
    figures = [
        Figure("true traces", len(pairs), unit=""),
        share_figure("found", [pair.row is not None for pair in pairs]),
        share_figure("pairs of rows of one stroke that are joined", together, low=97),
        share_figure("pairs of rows of different strokes wrongly joined", apart, high=3),
        share_figure("hop order right", right, low=97),
        calibration_figure(
            "probability of the hop order", PROBABILITY_EDGES, stated, right, high=MOST_POINTS
        ),
        least_hourly_figure("rows without a true trace", extra, minutes, high=1.0),
    ]
    oddities = [
        describe_pair(pair)
        for pair in pairs
        if pair.row is None or pair.row.hops != pair.truth.hops
    ]
    grids = (
        hop_grid(found, recordings),
        calibration("Probability of the hop order", stated, right),
    )
    title = "Groups and hop order (10-20 dB, several paths and hops)"
    return Part(title, tuple(figures), grids, notes=(GROUPS_NOTE,), oddities=tuple(oddities))


def joined(recordings: list[tuple[Pair, ...]]) -> tuple[list[bool], list[bool]]:
    """For pairs of found rows, of one stroke and of two near strokes, whether they are joined."""
    together, apart = [], []
    for pairs in recordings:
        found = [(pair.truth, pair.row) for pair in pairs if pair.row is not None]
        for (truth, row), (other, beside) in itertools.combinations(found, 2):
            if truth.group == other.group:
                together.append(row.group == beside.group)
            elif abs(truth.lightning_time_s - other.lightning_time_s) < NEAR_S:
                apart.append(row.group == beside.group)
    return together, apart


def hop_grid(found: list[Pair], recordings: list[Scored]) -> Grid:
    """Right hop orders and rightly joined pairs, by what the stroke sent."""
    orders: dict[tuple[int, int], set[int]] = defaultdict(set)
    for one in recordings:
        for pair in one.pairs:
            orders[pair.seed, pair.truth.group].add(pair.truth.hops)
    kinds: dict[tuple[int, ...], list[Pair]] = defaultdict(list)
    for pair in found:
        kinds[tuple(sorted(orders[pair.seed, pair.truth.group]))].append(pair)
    rows = []
    for kind in sorted(kinds):
        right = [pair.row is not None and pair.row.hops == pair.truth.hops for pair in kinds[kind]]
        by_seed = [
            tuple(pair for pair in kinds[kind] if pair.seed == seed)
            for seed in sorted({pair.seed for pair in kinds[kind]})
        ]
        together = joined(by_seed)[0]
        rows.append(
            (
                ":".join(map(str, kind)),
                float(len(right)),
                100.0 * float(np.mean(right)),
                float(len(together)),
                100.0 * float(np.mean(together)) if together else math.nan,
            )
        )
    head = ("hops sent", "traces found", "order right, %", "pairs", "joined, %")
    return Grid("By what the stroke sent", head, tuple(rows))


def hop_probabilities(found: list[Pair]) -> tuple[np.ndarray, np.ndarray]:
    """Stated probability of the hop order, and whether it is right, of every trace."""
    stated = np.array([getattr(pair.row, "hop_probability", math.nan) for pair in found])
    right = np.array([pair.row is not None and pair.row.hops == pair.truth.hops for pair in found])
    return stated, right


def calibration(title: str, stated: np.ndarray, right: np.ndarray) -> Grid:
    """Stated probabilities in bins against the share that was right."""
    rows = []
    for low, high, inside in bins(PROBABILITY_EDGES, stated):
        count, hits = int(inside.sum()), int(right[inside].sum())
        if count == 0:
            continue
        ends = exact_interval(hits, count)
        rows.append(
            (
                f"{low:g} to {high:g}",
                float(count),
                100.0 * float(stated[inside].mean()),
                100.0 * hits / count,
                f"{100.0 * ends[0]:.0f} to {100.0 * ends[1]:.0f}",
            )
        )
    head = ("stated", "cases", "mean stated, %", "right, %", "95 % interval")
    return Grid(title, head, tuple(rows))


def strokes(recordings: tuple[Heard, ...]) -> list[Stroke]:
    """One entry for every group of rows."""
    listed = []
    for one in recordings:
        members: dict[int, list[Pair]] = defaultdict(list)
        for pair in one.scored.pairs:
            if pair.row is not None:
                members[pair.row.group].append(pair)
        for group in members.values():
            common = Counter(pair.truth.group for pair in group).most_common(1)[0][0]
            first = next(pair for pair in group if pair.truth.group == common)
            if first.row is not None:
                likeliest_s = nearest(one.sferic_time_s, first.row.sferic_time_s)
                listed.append(Stroke(first.seed, first.truth, first.row, likeliest_s))
    return listed


def nearest(times_s: np.ndarray, wanted_s: float) -> float:
    """The catalogued time nearest another; NaN when there is none."""
    if times_s.size == 0 or not math.isfinite(wanted_s):
        return math.nan
    return float(times_s[np.argmin(np.abs(times_s - wanted_s))])


def sferics(options: Options) -> Part:
    """Sferics named rightly where the stated probability is high, and its calibration."""
    listed = strokes(crowded(options))
    named = [one for one in listed if one.row.sferic_seen]
    sure = [one for one in named if getattr(one.row, "sferic_probability", math.nan) > SURE]
    audible = [one for one in listed if one.truth.sferic_seen]
    stated = np.array([getattr(one.row, "sferic_probability", math.nan) for one in listed])
    right = np.array(right_of(listed))
    figures = [
        Figure("strokes", len(listed), unit=""),
        share_figure("named sferics right where stated above 0.9", right_of(sure), low=90),
        share_figure("named sferics right", right_of(named)),
        share_figure("audible sferics named", [one.row.sferic_seen for one in audible]),
        share_figure(
            "strokes without audible sferic that were given one",
            [one.row.sferic_seen for one in listed if not one.truth.sferic_seen],
        ),
        calibration_figure(
            "probability of the sferic", PROBABILITY_EDGES, stated, right, high=MOST_POINTS
        ),
    ]
    grid = calibration("Probability of the likeliest sferic", stated, right)
    oddities = [
        f"seed {one.seed} at {one.truth.lightning_time_s:.2f} s: L {one.truth.l_value:.2f} hops "
        f"{one.truth.hops} (measured {one.row.hops}), sferic "
        f"{one.row.sferic_time_s - one.truth.sferic_time_s:+.4f} s, heard {one.truth.sferic_seen}"
        for one in named
        if not one.right
    ]
    title = "Causative sferics (10-20 dB, 20 sferics/s)"
    notes = (CALIBRATION_NOTE,)
    return Part(title, tuple(figures), (grid,), notes=notes, oddities=tuple(oddities))


def right_of(listed: list[Stroke]) -> list[bool]:
    """Which of these strokes have the right likeliest sferic."""
    return [one.right for one in listed]
