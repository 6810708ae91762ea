"""Sigmas beside the bound of ridge picks, and beside the errors that were made."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from limits_run import Job, Options, Part, jobs_until, measure_all
from limits_stats import bins, least_hourly_figure, resampled, share_figure
from promises import Figure, Grid
from ridge_bound import RidgeBound, ridge_bound
from scoring import (
    Pair,
    Summary,
    campaign_scene,
    coverage,
    describe_extra,
    describe_pair,
    quantile,
)

from fieldlines import FieldLineModel, tube_content
from whistler.rows import WhistlerRow
from whistler.synthesis.draw import Campaign
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Medium
from whistler.synthesis.truth import WhistlerTruth

SIGMAS_AFTER = 4000
ASTRAY_AFTER = 5000
STRENGTH_DB = 10.0
TEN_DB = Campaign(
    l_range=(2.2, 4.5),
    snr_range_db=(STRENGTH_DB, STRENGTH_DB),
    low_range_hz=(800.0, 1500.0),
    spread_range_s=(0.0003, 0.002),
    offset_sd_m=0.0,
    hidden_share=0.5,
    path_shares=(1.0, 0.0, 0.0),
    hop_shares=(1.0, 0.0, 0.0, 0.0, 0.0),
)
L_EDGES = (2.2, 2.6, 3.2, 3.8, 4.5)
NORMAL = 1.4826  # standard deviation over median |x| of a normal distribution
CONSISTENT = (0.8, 1.25)  # robust rms of error over stated sigma
FAR_PULL = 5.0
SIGMAS_NOTE = (
    "The bound is for a mean of 10 dB over matched cells; the strength set is a median of 10 dB "
    "over the band, whose mean is some 2 dB more (fading, tilt): a bound for that is 1.3 times "
    "smaller. The time counts as known to the bound where the row names a sferic. Rows without "
    "sigma count as infinite in ratios and are left out of coverage."
)
ASTRAY_NOTE = (
    "Every recording of 20 s has a medium of its own; intervals draw recordings anew. Height and "
    "thickness of the F2 layer are the default's."
)


@dataclass(frozen=True)
class Bounded:
    """A found trace with its bound."""

    truth: WhistlerTruth
    row: WhistlerRow
    bound: RidgeBound

    @property
    def relative(self) -> dict[str, tuple[float, float, float]]:
        """Stated sigma, actual error and bound of L and density, as shares of the truth."""
        truth, row = self.truth, self.row
        stated = row.uncertainty_status == "ok"
        density = truth.equatorial_density_cm3
        values = {
            "L": (row.l_value_sd, row.l_value, truth.l_value, self.bound.l_sd_relative),
            "density": (
                row.equatorial_density_sd_cm3,
                row.equatorial_density_cm3,
                density,
                self.bound.density_sd_relative,
            ),
        }
        return {
            name: (
                sigma / true if stated else math.inf,
                abs(value / true - 1.0) if math.isfinite(value) else math.inf,
                bound,
            )
            for name, (sigma, value, true, bound) in values.items()
        }


def sigmas_scene(seed: int) -> Scene:
    """A minute of thin one-hop whistlers of 10 dB, half of them without their sferic."""
    return campaign_scene(seed, campaign=TEN_DB)


def bounded(summary: Summary, model: FieldLineModel) -> list[Bounded]:
    """The bound of every found trace."""
    return [
        Bounded(
            truth,
            row,
            ridge_bound(
                l_value=truth.l_value,
                density_m3=truth.equatorial_density_cm3 * 1e6,
                band_hz=(truth.frequency_low_hz, truth.frequency_high_hz),
                snr_db=STRENGTH_DB,
                time_known=row.sferic_seen,
                model=model,
            ),
        )
        for truth, row in summary.found
    ]


def sigmas(options: Options) -> Part:
    """Statistical sigmas at 10 dB: how near the bound, and whether they cover."""
    begin = options.first_seed + SIGMAS_AFTER
    least = options.amount(520, quick=60)
    jobs = jobs_until(sigmas_scene, range(begin, begin + 1000), least=least)
    summary = Summary.of(measure_all(jobs, options, name="sigmas"))
    found = bounded(summary, TEN_DB.medium.field_line_model())
    figures = [
        Figure("injections", len(summary.pairs), unit=""),
        Figure("found", 100 * summary.found_share),
        Figure("rows with status ok", 100 * summary.determined_share),
        Figure(
            "rows naming a sferic", 100 * float(np.mean([one.row.sferic_seen for one in found]))
        ),
    ]
    for name in ("L", "density"):
        figures += [*ratio_figures(found, name), consistency_figure(found, name)]
    figures += interval_figures(summary)
    figures += coverage_figures(summary.pairs, profile=False, one=(63, 73), two=(92, 97))
    for title, seen in (("sferic named", True), ("no sferic named", False)):
        some = tuple(p for p in summary.pairs if p.row is not None and p.row.sferic_seen == seen)
        figures += coverage_figures(some, profile=False, title=f", {title}")
    extra = len(summary.extra)
    figures.append(
        least_hourly_figure("rows without a true trace", extra, summary.minutes, high=1.0)
    )
    oddities = [*far_off(summary.pairs), *map(describe_extra, summary.extra)]
    return Part(
        "Statistical sigmas at 10 dB (thin traces, one hop, one path)",
        tuple(figures),
        grids=(ratio_grid(found), status_grid(summary)),
        notes=(SIGMAS_NOTE,),
        oddities=tuple(oddities),
    )


def ratios(found: list[Bounded], name: str) -> tuple[np.ndarray, np.ndarray]:
    """Stated sigma over bound, and size of the actual error over bound."""
    table = np.array([one.relative[name] for one in found])
    return table[:, 0] / table[:, 2], table[:, 1] / table[:, 2]


def ratio_figures(found: list[Bounded], name: str) -> Iterator[Figure]:
    """Stated sigma and actual error over bound, and the sigma's by L."""
    stated, actual = ratios(found, name)
    yield Figure(f"sigma of {name} over bound, median", quantile(stated, 0.5), high=1.5, unit="")
    yield Figure(f"sigma of {name} over bound, 90th percentile", quantile(stated, 0.9), unit="")
    yield Figure(f"error of {name} over bound, robust rms", robust_rms(actual), unit="")
    l_value = np.array([one.truth.l_value for one in found])
    for low, high, inside in bins(L_EDGES, l_value):
        if inside.any():
            where = f"sigma of {name} over bound at L {low:g} to {high:g}, median"
            yield Figure(where, quantile(stated[inside], 0.5), high=1.5, unit="")


def consistency_figure(found: list[Bounded], name: str) -> Figure:
    """Actual errors over stated sigmas, where these are stated: 1 when both agree."""
    stated = [one.relative[name] for one in found if one.row.uncertainty_status == "ok"]
    title = f"actual errors consistent with sigma of {name}: robust rms of error over sigma"
    if not stated:
        return Figure(title, math.nan, *CONSISTENT, unit="")
    sigma, error, _ = np.array(stated).T
    return Figure(title, robust_rms(error / sigma), *CONSISTENT, unit="")


def ratio_grid(found: list[Bounded]) -> Grid:
    """The same ratios by L and by whether the time was known from a sferic."""
    l_value = np.array([one.truth.l_value for one in found])
    seen = np.array([one.row.sferic_seen for one in found])
    rows: list[tuple[str | float, ...]] = []
    for low, high, inside in bins(L_EDGES, l_value):
        for known in (True, False):
            some = inside & (seen == known)
            if not some.any():
                continue
            cells: list[str | float] = [f"{low:g} to {high:g}", "known" if known else "free"]
            cells.append(float(some.sum()))
            for name in ("L", "density"):
                stated, actual = ratios([found[k] for k in np.flatnonzero(some)], name)
                cells += [quantile(stated, 0.5), quantile(stated, 0.9), robust_rms(actual)]
            rows.append(tuple(cells))
    kinds = ("sigma, median", "sigma, 90th percentile", "error, robust rms")
    heads = tuple(f"{name} {kind}" for name in ("L", "density") for kind in kinds)
    title = "Over the ridge bound"
    return Grid(title, ("L", "time", "traces", *heads), tuple(rows))


def status_grid(summary: Summary) -> Grid:
    """What the rows say of their sigmas, by L."""
    l_value = np.array([truth.l_value for truth, _ in summary.found])
    status = np.array([row.uncertainty_status for _, row in summary.found])
    names = tuple(sorted(set(status.tolist())))
    rows = tuple(
        (f"{low:g} to {high:g}", *(float(np.sum(inside & (status == name))) for name in names))
        for low, high, inside in bins(L_EDGES, l_value)
    )
    return Grid("Rows by status", ("L", *names), rows)


def robust_rms(error: np.ndarray) -> float:
    """Standard deviation of the normal distribution with this median of |error|."""
    return NORMAL * quantile(error, 0.5)


def coverage_figures(
    pairs: tuple[Pair, ...],
    *,
    profile: bool,
    one: tuple[float, float] = (-math.inf, math.inf),
    two: tuple[float, float] = (-math.inf, math.inf),
    title: str = "",
) -> Iterator[Figure]:
    """Share of true values within one and within 1.96 sigma, by recordings drawn anew."""
    stated = tuple(
        pair for pair in pairs if pair.row is not None and pair.row.uncertainty_status == "ok"
    )
    if not stated:
        return
    seeds = np.array([pair.seed for pair in stated])
    pulls = Summary(stated, (), math.nan).pulls(profile=profile)
    kind = "combined sigma" if profile else "sigma"
    for name, pull in zip(("L", "density"), pulls, strict=True):
        for width, limits in ((1.0, one), (1.96, two)):
            ends = resampled(seeds, share_within(pull, width))[0]
            yield Figure(
                f"{name} within {width:g} {kind}{title} ({len(stated)})",
                100.0 * coverage(pull, width),
                *limits,
                interval=ends,
            )


def interval_figures(summary: Summary) -> Iterator[Figure]:
    """Share of true values within the stated 95 % intervals, where they are stated."""
    found = [(t, r) for t, r in summary.found if r.uncertainty_status == "ok"]
    for name, ends in (
        ("L", [(r.l_value_low, t.l_value, r.l_value_high) for t, r in found]),
        (
            "density",
            [
                (
                    r.equatorial_density_low_cm3,
                    t.equatorial_density_cm3,
                    r.equatorial_density_high_cm3,
                )
                for t, r in found
            ],
        ),
    ):
        hits = [low <= true <= high for low, true, high in ends if math.isfinite(low + high)]
        yield share_figure(f"{name} within its stated 95 % interval", hits, low=92, high=97)


def share_within(pull: np.ndarray, width: float) -> Callable[[np.ndarray], list[float]]:
    """The coverage in per cent of a part of the pulls."""
    return lambda index: [100.0 * coverage(pull[index], width)]


def far_off(pairs: tuple[Pair, ...]) -> list[str]:
    """What was missed, and what lies many sigmas off."""
    lines = []
    for pair in pairs:
        if pair.row is None:
            lines.append(describe_pair(pair))
        elif pair.row.uncertainty_status == "ok":
            pull = abs(pair.row.l_value - pair.truth.l_value) / pair.row.l_value_sd
            if pull > FAR_PULL:
                lines.append(f"{describe_pair(pair)}: L {pull:.0f} sigmas off")
    return lines


def astray_scene(seed: int) -> Scene:
    """A third of a minute in a medium of its own, its strokes 800 km astray."""
    generator = np.random.default_rng([seed, 1])
    medium = Medium(
        density_exponent=round(float(generator.uniform(0.0, 3.0)), 3),
        fo_f2_mhz=round(float(generator.uniform(3.0, 9.0)), 3),
    )
    campaign = Campaign(
        l_range=(2.2, 4.5),
        snr_range_db=(10.0, 20.0),
        offset_sd_m=800e3,
        path_shares=(1.0, 0.0, 0.0),
        hop_shares=(0.9, 0.1, 0.0, 0.0, 0.0),
        medium=medium,
    )
    return campaign_scene(seed, campaign=campaign, duration_s=20.0)


def astray(options: Options) -> Part:
    """What statistical and profile sigma together cover where the default model is wrong."""
    begin = options.first_seed + ASTRAY_AFTER
    least = options.amount(260, quick=40)
    jobs = jobs_until(astray_scene, range(begin, begin + 1000), least=least)
    summary = Summary.of(measure_all(jobs, options, name="astray"))
    l_error, density_error = summary.l_error, summary.density_error
    figures = [
        Figure("true traces", len(summary.pairs), unit=""),
        Figure("found", 100 * summary.found_share),
        Figure("hop order right", 100 * summary.hops_share),
        Figure("rows with status ok", 100 * summary.determined_share),
        Figure("error of L, median", 100 * quantile(l_error, 0.5)),
        Figure("error of density, median", 100 * quantile(density_error, 0.5)),
        *coverage_figures(summary.pairs, profile=True, one=(60, 80), two=(92, 100)),
        *tube_figures(jobs, summary.pairs),
    ]
    return Part(
        "Truth outside the default profile (alpha 0-3, foF2 3-9 MHz, strokes 800 km astray)",
        tuple(figures),
        grids=(status_grid(summary),),
        notes=(ASTRAY_NOTE,),
    )


def tube_figures(jobs: list[Job], pairs: tuple[Pair, ...]) -> Iterator[Figure]:
    """Error and coverage of the tube content, which ought to be smaller than the density's."""
    models = {job.seed: job.scene.medium.field_line_model() for job in jobs}
    errors, sigmas_, within = [], [], []
    for pair in pairs:
        if pair.row is None or pair.row.uncertainty_status != "ok":
            continue
        truth, row = pair.truth, pair.row
        true = tube_content(
            truth.l_value,
            equatorial_density_m3=truth.equatorial_density_cm3 * 1e6,
            model=models[pair.seed],
        )
        sigma = math.hypot(row.tube_content_sd_m2, row.tube_content_profile_sd_m2)
        errors.append(row.tube_content_m2 / true - 1.0)
        sigmas_.append(sigma / true)
        within.append(abs(row.tube_content_m2 - true) / sigma)
    if not errors:
        return
    yield Figure("error of tube content, median", 100 * quantile(np.array(errors), 0.5))
    yield Figure("combined sigma of tube content, median", 100 * quantile(np.array(sigmas_), 0.5))
    for width in (1.0, 1.96):
        hits = np.array(within) <= width
        yield share_figure(f"tube content within {width:g} combined sigma", hits)
