"""How close two equal traces may lie and still be found as two."""

from __future__ import annotations

import math
import tempfile
from dataclasses import dataclass, replace
from pathlib import Path as FilePath

import numpy as np
from limits_run import Job, Options, Part, shared_out
from limits_stats import bins, logistic, resampled, share_figure
from promises import Figure
from scipy.optimize import brentq
from scoring import campaign_scene, heard, match

from fieldlines import FieldLineModel, travel_time
from whistler.synthesis.draw import Campaign
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Path, Stroke
from whistler.synthesis.truth import WhistlerTruth

AFTER = 8000
AT_HZ = 4000.0
GAP_RANGE_S = (0.003, 0.120)
EDGES_MS = (3.0, 6.0, 10.0, 15.0, 20.0, 30.0, 45.0, 60.0, 80.0, 120.0)
SINGLE = Campaign(
    l_range=(2.2, 3.8),
    snr_range_db=(10.0, 10.0),
    low_range_hz=(800.0, 1500.0),
    spread_range_s=(0.0003, 0.001),
    offset_sd_m=0.0,
    path_shares=(1.0, 0.0, 0.0),
    hop_shares=(1.0, 0.0, 0.0, 0.0, 0.0),
    pause_range_s=(1.0, 2.0),
)
# A row belongs to one of two traces only when it is nearer to it than to the middle of both.
TOLERANCE = 0.4
LARGEST_STEP = 0.8  # of L, and of ln density: far beyond the largest gap
SEPARABLE_NOTE = (
    "Two paths of one stroke, 10 dB each, thin; they differ in density at one L, or in L at one "
    "density. Both count as found when each has a row of its own within 0.4 of their median "
    "distance over the band. Shares follow a logistic curve in the logarithm of the difference."
)


@dataclass(frozen=True)
class Twin:
    """Two traces: in what they differ, by how much at 4 kHz, and whether both were found."""

    seed: int
    differ_in_l: bool
    gap_s: float
    both: bool


def second_path(path: Path, *, gap_s: float, in_l: bool, model: FieldLineModel) -> Path:
    """The path whose trace comes later than this one's by so much at 4 kHz, otherwise like it."""

    def moved(step: float) -> Path:
        if in_l:
            return replace(path, l_value=path.l_value + step)
        density_cm3 = path.equatorial_density_cm3 * math.exp(step)
        return replace(path, equatorial_density_cm3=density_cm3)

    def excess_s(step: float) -> float:
        return delay_s(moved(step), model) - delay_s(path, model) - gap_s

    return moved(float(brentq(excess_s, 0.0, LARGEST_STEP)))


def delay_s(path: Path, model: FieldLineModel) -> float:
    """Travel time of one hop at 4 kHz."""
    return float(
        travel_time(
            np.array([AT_HZ]),
            l_value=path.l_value,
            equatorial_density_m3=path.equatorial_density_cm3 * 1e6,
            model=model,
        )[0]
    )


def twin_scene(seed: int) -> Scene:
    """A minute of strokes with two paths each; odd seeds differ in L, even ones in density."""
    scene = campaign_scene(seed, campaign=SINGLE)
    model = scene.medium.field_line_model()
    generator = np.random.default_rng([seed, 3])
    strokes: list[Stroke] = []
    for stroke in scene.strokes:
        gap_s = float(np.exp(generator.uniform(*np.log(GAP_RANGE_S))))
        (path,) = stroke.paths
        other = second_path(path, gap_s=gap_s, in_l=seed % 2 == 1, model=model)
        strokes.append(replace(stroke, paths=(path, other)))
    return replace(scene, strokes=tuple(strokes))


def measure_twins(job: Job) -> list[Twin]:
    """Measure one scene: for each stroke, whether both of its traces were found."""
    with tempfile.TemporaryDirectory() as folder:
        truth, measurement = heard(job.scene, folder=FilePath(folder), settings=job.settings)
    model = job.scene.medium.field_line_model()
    twins = []
    for number, stroke in enumerate(job.scene.strokes, 1):
        traces = [one for one in truth.whistlers if one.group == number]
        if not all(trace.complete for trace in traces):
            continue
        first, second = stroke.paths
        gap_s = delay_s(second, model) - delay_s(first, model)
        within_s = TOLERANCE * distance_s(*traces)
        both = len(match(traces, measurement.rows, within_s=within_s)) == 2
        twins.append(Twin(job.seed, job.seed % 2 == 1, gap_s, both))
    return twins


def distance_s(first: WhistlerTruth, second: WhistlerTruth) -> float:
    """Median distance in time of two true traces over their common band."""
    frequency_hz = np.linspace(
        max(first.frequency_low_hz, second.frequency_low_hz),
        min(first.frequency_high_hz, second.frequency_high_hz),
        200,
    )
    times_s = [
        np.interp(frequency_hz, one.trace.frequency_hz, one.trace.time_s) for one in (first, second)
    ]
    return float(np.median(np.abs(times_s[1] - times_s[0])))


def separable(options: Options) -> Part:
    """Smallest delay difference at which both of two equal traces are found."""
    begin = options.first_seed + AFTER
    seeds = range(begin, begin + options.amount(36, quick=6))
    jobs = [Job(seed, twin_scene(seed)) for seed in seeds]
    twins = [one for some in shared_out(measure_twins, jobs, options, name="pairs") for one in some]
    figures = [Figure("pairs of traces", len(twins), unit="")]
    for title, in_l in (("in density", False), ("in L", True)):
        figures += gap_figures([one for one in twins if one.differ_in_l == in_l], title)
    title = "Closest separable paths (10 dB each, delay difference at 4 kHz)"
    return Part(title, tuple(figures), notes=(SEPARABLE_NOTE,))


def gap_figures(twins: list[Twin], title: str) -> list[Figure]:
    """Differences at which half and nine tenths are separated, and the shares in bins."""
    gap_ms = 1e3 * np.array([one.gap_s for one in twins])
    both = np.array([one.both for one in twins])

    def at_shares(index: np.ndarray) -> list[float]:
        curve = logistic(10.0 * np.log10(gap_ms[index]), both[index])
        return [10.0 ** (0.1 * curve.strength_db(share)) for share in (0.5, 0.9)]

    values, ends = at_shares(np.arange(gap_ms.size)), resampled(np.arange(both.size), at_shares)
    figures = [
        Figure(f"{share} separated, differing {title}", value, unit="ms", interval=interval)
        for share, value, interval in zip(("half", "90 %"), values, ends, strict=True)
    ]
    return figures + [
        share_figure(f"separated at {low:g} to {high:g} ms, differing {title}", both[inside])
        for low, high, inside in bins(EDGES_MS, gap_ms)
    ]
