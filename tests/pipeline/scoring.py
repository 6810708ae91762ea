"""Measured rows against the truth of synthetic recordings: matching, and what is made of it.

Matching rule. A row may belong to a true trace when the median, over the row's own points inside
the true band, of |measured time - true time at that frequency| is at most 30 ms; at least four
points and half of the row's points must lie inside the band. Pairs are one-to-one, as many as
possible, and among those the closest. A true trace without a row is missed; a row without a true
trace is extra. 30 ms is far above any timing error (a few ms) and far below the distance of drawn
neighbouring paths, which is hundreds of ms over most of the band.

Hop order is not part of the rule: a row with the wrong order is found, and its L and density count
with all their error. An undetermined L or density counts as an infinite error, never as left out.
"""

from __future__ import annotations

import math
import tempfile
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from promises import Figure
from scipy.optimize import linear_sum_assignment

from whistler.measure import Measurement, measure_recording
from whistler.recording import open_recording
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.synthesis.draw import Campaign, draw_decoy_scene, draw_scene
from whistler.synthesis.files import flac_bytes
from whistler.synthesis.render import render
from whistler.synthesis.scene import Scene
from whistler.synthesis.truth import Truth, WhistlerTruth

MATCH_S = 0.030
LEAST_POINTS = 4
SFERIC_S = 0.005
DECADE = math.log(10.0)


@dataclass(frozen=True)
class Pair:
    """A true trace with its row, None when it was missed; `seed` makes the scene again."""

    seed: int
    truth: WhistlerTruth
    row: WhistlerRow | None


@dataclass(frozen=True)
class Scored:
    """One recording: its true traces, and the rows that belong to none."""

    seed: int
    duration_s: float
    pairs: tuple[Pair, ...]
    extra: tuple[WhistlerRow, ...]


def distance_s(row: WhistlerRow, truth: WhistlerTruth) -> float:
    """Median distance in time of a row's points from a true trace; infinite when out of reach."""
    points, line = row.trace, truth.trace
    inside = (points.frequency_hz >= truth.frequency_low_hz) & (
        points.frequency_hz <= truth.frequency_high_hz
    )
    if inside.sum() < max(LEAST_POINTS, 0.5 * inside.size):
        return math.inf
    wanted_s = np.interp(points.frequency_hz[inside], line.frequency_hz, line.time_s)
    return float(np.median(np.abs(points.time_s[inside] - wanted_s)))


def match(
    truths: Sequence[WhistlerTruth], rows: Sequence[WhistlerRow], *, within_s: float = MATCH_S
) -> list[tuple[int, int, float]]:
    """One-to-one pairs (truth, row, distance): most pairs first, then the closest."""
    if not truths or not rows:
        return []
    table = np.array([[distance_s(row, truth) for row in rows] for truth in truths])
    allowed = table <= within_s
    # A forbidden pair costs more than all allowed ones together could save.
    cost = np.where(allowed, table, 1.0 + within_s * min(table.shape))
    pairs = zip(*linear_sum_assignment(cost), strict=True)
    return [(int(i), int(j), float(table[i, j])) for i, j in pairs if allowed[i, j]]


def score(truths: Iterable[WhistlerTruth], rows: Sequence[WhistlerRow], *, seed: int) -> Scored:
    """Pair the complete true traces of one recording with its rows."""
    whole = [truth for truth in truths if truth.complete]
    partner = {i: j for i, j, _ in match(whole, rows)}
    pairs = [
        Pair(seed, truth, rows[partner[i]] if i in partner else None)
        for i, truth in enumerate(whole)
    ]
    taken = set(partner.values())
    extra = tuple(row for j, row in enumerate(rows) if j not in taken)
    return Scored(seed, math.nan, tuple(pairs), extra)


def heard(
    scene: Scene, *, folder: Path, settings: Settings | None = None
) -> tuple[Truth, Measurement]:
    """Render a scene to FLAC, open it, measure it: its truth, and what was measured."""
    recording = render(scene)
    path = folder / f"{scene.name}.flac"
    path.write_bytes(flac_bytes(recording))
    measurement = measure_recording(open_recording(path), settings or Settings())
    path.unlink()
    return recording.truth, measurement


def measure_scene(
    scene: Scene, *, seed: int, folder: Path, settings: Settings | None = None
) -> Scored:
    """Render, measure and score a scene."""
    truth, measurement = heard(scene, folder=folder, settings=settings)
    scored = score(truth.whistlers, measurement.rows, seed=seed)
    return Scored(seed, scene.duration_s, scored.pairs, scored.extra)


def campaign_scene(seed: int, *, campaign: Campaign, duration_s: float = 60.0) -> Scene:
    """The scene of one seed."""
    return draw_scene(
        np.random.default_rng(seed), campaign=campaign, duration_s=duration_s, name=f"draw{seed}"
    )


def run_campaign(
    seeds: Iterable[int], *, campaign: Campaign, least: int, folder: Path | None = None
) -> list[Scored]:
    """Measure scenes, seed by seed, until there are `least` true traces."""
    done: list[Scored] = []
    with tempfile.TemporaryDirectory() as place:
        for seed in seeds:
            scene = campaign_scene(seed, campaign=campaign)
            done.append(measure_scene(scene, seed=seed, folder=folder or Path(place)))
            if sum(len(one.pairs) for one in done) >= least:
                break
    return done


def run_decoys(
    seeds: Iterable[int], *, duration_s: float = 60.0, folder: Path | None = None
) -> list[Scored]:
    """Measure one decoy scene of each seed: every row is a false detection."""
    with tempfile.TemporaryDirectory() as place:
        return [
            measure_scene(
                draw_decoy_scene(
                    np.random.default_rng(seed), duration_s=duration_s, name=f"decoy{seed}"
                ),
                seed=seed,
                folder=folder or Path(place),
            )
            for seed in seeds
        ]


def _relative(measured: float, true: float) -> float:
    return measured / true - 1.0 if math.isfinite(measured) else math.inf


def _share(hits: Iterable[bool]) -> float:
    listed = list(hits)
    return sum(listed) / len(listed) if listed else math.nan


@dataclass(frozen=True)
class Summary:
    """The figures of a campaign, over all its recordings."""

    pairs: tuple[Pair, ...]
    extra: tuple[WhistlerRow, ...]
    minutes: float

    @classmethod
    def of(cls, scored: Sequence[Scored]) -> Summary:
        """Gather recordings."""
        return cls(
            tuple(pair for one in scored for pair in one.pairs),
            tuple(row for one in scored for row in one.extra),
            sum(one.duration_s for one in scored) / 60.0,
        )

    @property
    def found(self) -> list[tuple[WhistlerTruth, WhistlerRow]]:
        """True traces that have a row, with it."""
        return [(pair.truth, pair.row) for pair in self.pairs if pair.row is not None]

    @property
    def found_share(self) -> float:
        """Share of true traces found."""
        return _share(pair.row is not None for pair in self.pairs)

    @property
    def hops_share(self) -> float:
        """Share of found traces with the right hop order."""
        return _share(truth.hops == row.hops for truth, row in self.found)

    @property
    def l_error(self) -> np.ndarray:
        """Relative error of L of each found trace; infinite where it is undetermined."""
        return np.array([_relative(row.l_value, truth.l_value) for truth, row in self.found])

    @property
    def density_error(self) -> np.ndarray:
        """The same for the density."""
        return np.array(
            [
                _relative(row.equatorial_density_cm3, truth.equatorial_density_cm3)
                for truth, row in self.found
            ]
        )

    @property
    def sferic_share(self) -> float:
        """Share of identified sferics that lie within 5 ms of the true one."""
        return _share(
            abs(row.sferic_time_s - truth.sferic_time_s) <= SFERIC_S
            for truth, row in self.found
            if row.sferic_seen
        )

    @property
    def identified_share(self) -> float:
        """Share of found traces, their sferic being heard, whose sferic was identified at all."""
        return _share(row.sferic_seen for truth, row in self.found if truth.sferic_seen)

    @property
    def determined_share(self) -> float:
        """Share of found traces with L, density and their sigmas."""
        return _share(row.uncertainty_status == "ok" for _, row in self.found)

    def pulls(self, *, profile: bool = False) -> tuple[np.ndarray, np.ndarray]:
        """Errors of L and of density in their own sigmas, where a sigma is given.

        `profile` takes the statistical and the profile sigma together.
        """
        l_pull, density_pull = [], []
        for truth, row in self.found:
            if row.uncertainty_status != "ok":
                continue
            l_sd, density_sd = row.l_value_sd, row.equatorial_density_sd_cm3
            if profile:
                l_sd = math.hypot(l_sd, row.l_value_profile_sd)
                density_sd = math.hypot(density_sd, row.equatorial_density_profile_sd_cm3)
            l_pull.append((row.l_value - truth.l_value) / l_sd)
            density_pull.append(
                (row.equatorial_density_cm3 - truth.equatorial_density_cm3) / density_sd
            )
        return np.array(l_pull), np.array(density_pull)


def quantile(error: np.ndarray, share: float) -> float:
    """The `share` quantile of |error|, taken from the values themselves: infinities stay."""
    return float(np.quantile(np.abs(error), share, method="inverted_cdf"))


def coverage(pull: Sequence[float] | np.ndarray, sigmas: float) -> float:
    """Share of pulls within so many sigmas."""
    return float(np.mean(np.abs(pull) <= sigmas))


def promised(summary: Summary) -> list[Figure]:
    """The figures of a campaign that are promised, in per cent."""
    l_error, density_error = summary.l_error, summary.density_error
    pulls = dict(zip(("L", "density"), summary.pulls(), strict=True))
    figures = [
        Figure("traces found", 100 * summary.found_share, low=95),
        Figure("hop order right", 100 * summary.hops_share, low=95),
        Figure("error of L, median", 100 * quantile(l_error, 0.5), high=1),
        Figure("error of L, 90th percentile", 100 * quantile(l_error, 0.9), high=4),
        Figure("error of density, median", 100 * quantile(density_error, 0.5), high=4),
        Figure("error of density, 90th percentile", 100 * quantile(density_error, 0.9), high=15),
        Figure("identified sferics within 5 ms", 100 * summary.sferic_share, low=90),
    ]
    for name, pull in pulls.items():
        figures += [
            Figure(f"{name} within one sigma", 100 * coverage(pull, 1.0), low=58, high=80),
            Figure(f"{name} within 1.96 sigma", 100 * coverage(pull, 1.96), low=90),
        ]
    return figures


def describe_pair(pair: Pair) -> str:
    """One line on a true trace and what was measured of it, with the seed that makes it again."""
    truth, row = pair.truth, pair.row
    head = (
        f"seed {pair.seed} group {truth.group}: L {truth.l_value:.2f} "
        f"n {truth.equatorial_density_cm3:.0f} hops {truth.hops} {truth.snr_db:.1f} dB "
        f"spread {1e3 * truth.spread_s:.1f} ms at {truth.lightning_time_s:.2f} s"
    )
    if row is None:
        return f"{head}: missed"
    return (
        f"{head}: measured L {100 * _relative(row.l_value, truth.l_value):+.1f} % "
        f"n {100 * _relative(row.equatorial_density_cm3, truth.equatorial_density_cm3):+.1f} % "
        f"hops {row.hops}, sferic {row.sferic_time_s - truth.sferic_time_s:+.4f} s "
        f"{'seen' if row.sferic_seen else 'predicted'} (heard {truth.sferic_seen}), "
        f"L sd {row.l_value_sd:.3f}, {row.uncertainty_status}"
    )


def describe_extra(row: WhistlerRow) -> str:
    """One line on a row without a true trace."""
    return (
        f"extra row in {row.recording.rsplit('/', 1)[-1]}: L {row.l_value:.2f} "
        f"hops {row.hops} sferic {row.sferic_time_s:.2f} s, {row.snr_db:.0f} dB, "
        f"{row.frequency_low_hz:.0f}-{row.frequency_high_hz:.0f} Hz, "
        f"significance {row.significance:.2g}"
    )


def problems(summary: Summary) -> list[str]:
    """One line for every missed, mistaken or far-off trace, with the seed that makes it again."""
    lines = []
    for pair in summary.pairs:
        truth, row = pair.truth, pair.row
        mistaken = row is None or (
            row.hops != truth.hops
            or abs(_relative(row.l_value, truth.l_value)) > 0.04
            or (row.sferic_seen and abs(row.sferic_time_s - truth.sferic_time_s) > SFERIC_S)
        )
        if mistaken:
            lines.append(describe_pair(pair))
    return [*lines, *map(describe_extra, summary.extra)]
