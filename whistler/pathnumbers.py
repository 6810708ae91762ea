"""L, density and tube content of one path with all their sigmas, or why these are missing."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fieldlines import FieldLineModel
from whistler.fit import StrokeFit, fit_stroke
from whistler.group import SURE, Stroke
from whistler.likelihood import PathIntervals, path_intervals
from whistler.problem import PathTrace, Ties
from whistler.rows import NAN
from whistler.scatter import declared_scatter
from whistler.settings import Settings
from whistler.settle import leaning
from whistler.uncertainty import (
    LEANING,
    ProfilePart,
    data_share,
    profile_part,
    tube_content_gradient,
    uncertainty_status,
)

LEAST_DATA_SHARE = 0.5  # of the knowledge of density: below, a declared prior has the larger say


@dataclass(frozen=True)
class PathNumbers:
    """L and density of one path with all their sigmas; NaN where they are not determined.

    Parameters
    ----------
    l_value, l_sd, l_profile_sd, l_low, l_high : float
        L, its two one-sigmas, its interval of 95 %.
    density_m3, density_sd_m3, density_profile_sd_m3, density_low_m3, density_high_m3 : float
        The same of the density.
    log_tube_sd, log_tube_profile_sd : float
        One-sigmas of ln tube content.
    correlation : float
        Of ln L and ln density.
    status : str
        ``ok``, or why a sigma is missing.
    leaning : StrokeFit, optional
        The fit the numbers are from, where a prior had to help.
    misfit : bool
        Whether nothing fits.
    curved : bool
        Whether sigmas and intervals are from the profile likelihood.
    """

    l_value: float = NAN
    l_sd: float = NAN
    l_profile_sd: float = NAN
    l_low: float = NAN
    l_high: float = NAN
    density_m3: float = NAN
    density_sd_m3: float = NAN
    density_profile_sd_m3: float = NAN
    density_low_m3: float = NAN
    density_high_m3: float = NAN
    log_tube_sd: float = NAN
    log_tube_profile_sd: float = NAN
    correlation: float = NAN
    status: str = "undetermined"
    leaning: StrokeFit | None = None
    misfit: bool = False
    curved: bool = False


def path_numbers(
    stroke: Stroke, opened: StrokeFit, *, ties: Ties, settings: Settings
) -> list[PathNumbers]:
    """Return the numbers of each path of a stroke.

    Parameters
    ----------
    stroke : Stroke
        The settled stroke.
    opened : StrokeFit
        Its traces with what the model leaves open fitted too.
    ties : Ties
        The ties of the fit.
    settings : Settings
        Declared one-sigmas and priors.
    """
    part = profile_part(stroke.fit, opened, scatter=declared_scatter(settings))
    return [
        _numbers(stroke, path, part, stroke.fit.model, ties, settings)
        for path in range(len(stroke.fit.log_l))
    ]


def _numbers(
    stroke: Stroke,
    path: int,
    part: ProfilePart,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> PathNumbers:
    fit = stroke.fit
    status = uncertainty_status(fit, path, l_range=settings.l_range)
    if status == "misfit":
        return PathNumbers(misfit=True)
    if status == "at-bound":
        return PathNumbers(status=status)
    if status == "undetermined":
        return _with_prior(stroke.traces, fit, path, model, ties, settings)
    weak = data_share(fit, path, ties=ties) < LEAST_DATA_SHARE
    if weak or stroke.hop_probability < SURE:
        # The density hangs on a prior: the declared one, or that of the hop order, which makes a
        # factor of four and more.
        return _without_sigmas(fit, path)
    intervals = path_intervals(fit, path, model=model, ties=ties)
    if not np.isfinite([intervals.log_l.sd, intervals.log_density.sd]).all():
        return _with_prior(stroke.traces, fit, path, model, ties, settings)
    return _determined(fit, path, part, intervals, model, ties)


def _determined(
    fit: StrokeFit,
    path: int,
    part: ProfilePart,
    intervals: PathIntervals,
    model: FieldLineModel,
    ties: Ties,
) -> PathNumbers:
    l_value, density_m3 = fit.start[path]
    covariance = fit.covariance[2 * path : 2 * path + 2, 2 * path : 2 * path + 2]
    correlation = float(covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1]))
    # One side may be farther than the other; what is passed on keeps the correlation.
    slope = tube_content_gradient(fit, path)
    slope *= (intervals.log_l.sd, intervals.log_density.sd)
    content = slope @ np.array([[1.0, correlation], [correlation, 1.0]]) @ slope
    free = ties.l_value is None
    return PathNumbers(
        l_value=l_value,
        l_sd=l_value * intervals.log_l.sd if free else NAN,
        l_profile_sd=l_value * float(np.sqrt(part.log_l[path])) if free else NAN,
        l_low=float(np.exp(intervals.log_l.low)) if free else NAN,
        l_high=float(np.exp(intervals.log_l.high)) if free else NAN,
        density_m3=density_m3,
        density_sd_m3=density_m3 * intervals.log_density.sd,
        density_profile_sd_m3=density_m3 * float(np.sqrt(part.log_density[path])),
        density_low_m3=float(np.exp(intervals.log_density.low)),
        density_high_m3=float(np.exp(intervals.log_density.high)),
        log_tube_sd=float(np.sqrt(max(content, 0.0))),
        log_tube_profile_sd=float(np.sqrt(part.log_tube[path])),
        correlation=correlation if free else NAN,
        status="ok",
        curved=intervals.curved,
    )


def _with_prior(
    traces: Sequence[PathTrace],
    fit: StrokeFit,
    path: int,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> PathNumbers:
    """Lean on the climatology where the trace alone is too weak, and say so; no sigma then."""
    with_prior = fit
    if ties.density_prior_dex is None:
        if settings.density_prior == "none":
            return PathNumbers()
        ties = leaning(ties, settings, sd_dex=settings.density_prior_sd_dex)
        with_prior = _refit(traces, fit, model, ties)
    if uncertainty_status(with_prior, path, l_range=settings.l_range, leniency=LEANING) != "ok":
        return PathNumbers()
    return _without_sigmas(with_prior, path)


def _refit(
    traces: Sequence[PathTrace], fit: StrokeFit, model: FieldLineModel, ties: Ties
) -> StrokeFit:
    start_s = fit.lightning_time_s
    return fit_stroke(traces, start=fit.start, lightning_time_s=start_s, model=model, ties=ties)


def _without_sigmas(fit: StrokeFit, path: int) -> PathNumbers:
    l_value, density_m3 = fit.start[path]
    return PathNumbers(
        l_value=l_value, density_m3=density_m3, status="prior-dominated", leaning=fit
    )
