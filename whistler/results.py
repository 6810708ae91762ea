"""From a fitted stroke to catalogue rows: every derived quantity, and honest gaps."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fieldlines import (
    DomainError,
    FieldLineModel,
    maximum_frequency,
    nose,
    tube_content,
    zero_frequency_dispersion,
)
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit, fit_stroke
from whistler.group import Stroke, predicted_sferic
from whistler.problem import PathTrace, Ties
from whistler.rows import NAN, WhistlerRow
from whistler.settings import Settings
from whistler.uncertainty import profile_covariance, uncertainty_status

DIFFUSE_S = 0.010  # thickness from which a trace is called diffuse
AMBIGUOUS = 0.5  # probability of the likeliest sferic from which a doubt is worth a flag


@dataclass(frozen=True)
class Sighting:
    """What the search and the tracing say of one trace, beyond its points.

    Parameters
    ----------
    snr_db : float
        Median strength.
    significance : float
        False alarms expected in an hour.
    thickness_s : float
        RMS thickness of the trace.
    """

    snr_db: float = NAN
    significance: float = NAN
    thickness_s: float = 0.0


@dataclass(frozen=True)
class _PathNumbers:
    """L and density of one path with all their sigmas; NaN where they are not determined."""

    l_value: float = NAN
    l_sd: float = NAN
    l_profile_sd: float = NAN
    density_m3: float = NAN
    density_sd_m3: float = NAN
    density_profile_sd_m3: float = NAN
    correlation: float = NAN
    status: str = "undetermined"


def stroke_rows(
    stroke: Stroke,
    sightings: Sequence[Sighting],
    *,
    group: int,
    recording: str,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> list[WhistlerRow]:
    """Return one row for each trace of a stroke.

    Parameters
    ----------
    stroke : Stroke
        The fitted stroke.
    sightings : sequence of Sighting
        One for each of its traces.
    group : int
        Number of the stroke.
    recording : str
        Path as given.
    model : fieldlines.FieldLineModel
        The default model.
    ties : Ties
        The ties of the fit.
    settings : Settings
        Declared one-sigmas of what the model leaves open.

    Returns
    -------
    list of WhistlerRow
        In the order of the stroke's traces; `time` is left to the caller, who knows the clock.
    """
    fit = stroke.fit
    profile = profile_covariance(fit, stroke.traces, model=model, ties=ties, settings=settings)
    numbers = [
        _path_numbers(stroke, path, profile[path], model, ties, settings)
        for path in range(len(fit.log_l))
    ]
    sferic_s, sferic_sd_s, _ = predicted_sferic(fit, stroke.hops[0], settings=settings)
    if stroke.sferic is not None:
        sferic_s, sferic_sd_s = stroke.sferic.time_s, stroke.sferic.sd_s
    rows = []
    for item, sighting, rms_s in zip(stroke.traces, sightings, fit.rms_s, strict=True):
        found = numbers[item.path]
        rows.append(
            WhistlerRow(
                recording=recording,
                group=group,
                sferic_time_s=sferic_s,
                sferic_time_sd_s=sferic_sd_s,
                sferic_seen=stroke.sferic is not None,
                lightning_time_s=fit.lightning_time_s,
                hops=item.hops,
                l_value=found.l_value,
                l_value_sd=found.l_sd,
                l_value_profile_sd=found.l_profile_sd,
                equatorial_density_cm3=found.density_m3 / 1e6,
                equatorial_density_sd_cm3=found.density_sd_m3 / 1e6,
                equatorial_density_profile_sd_cm3=found.density_profile_sd_m3 / 1e6,
                l_density_correlation=found.correlation,
                frequency_low_hz=float(item.trace.frequency_hz.min()),
                frequency_high_hz=float(item.trace.frequency_hz.max()),
                snr_db=sighting.snr_db,
                significance=sighting.significance,
                fit_rms_s=float(rms_s),
                uncertainty_status=found.status,
                flags=_flags(stroke, item, sighting),
                trace=item.trace,
                **_derived(fit, item.path, found, model),
            )
        )
    return rows


def _derived(
    fit: StrokeFit, path: int, found: _PathNumbers, model: FieldLineModel
) -> dict[str, float]:
    """One-hop quantities of the fitted model; D0 is well fixed even where L is not."""
    l_value, density_m3 = fit.start[path]
    try:
        dispersion = zero_frequency_dispersion(
            l_value, equatorial_density_m3=density_m3, model=model
        )
        if not np.isfinite(found.l_value):
            return {"dispersion_s_sqrt_hz": dispersion}
        tip = nose(found.l_value, equatorial_density_m3=found.density_m3, model=model)
        return {
            "dispersion_s_sqrt_hz": zero_frequency_dispersion(
                found.l_value, equatorial_density_m3=found.density_m3, model=model
            ),
            "nose_frequency_hz": tip.frequency_hz,
            "nose_time_s": tip.time_s,
            "equatorial_gyrofrequency_hz": maximum_frequency(found.l_value, model=model),
            "tube_content_m2": tube_content(
                found.l_value, equatorial_density_m3=found.density_m3, model=model
            ),
        }
    except DomainError:  # a fit that ended on a limit may lie outside a formula's range
        return {}


def _path_numbers(
    stroke: Stroke,
    path: int,
    profile: FloatArray,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> _PathNumbers:
    fit = stroke.fit
    status = uncertainty_status(fit, path)
    l_value, density = fit.start[path]
    if status == "ok":
        part = fit.covariance[2 * path : 2 * path + 2, 2 * path : 2 * path + 2]
        l_sd, density_sd = np.sqrt(np.diag(part))
        return _PathNumbers(
            l_value,
            l_value * float(l_sd),
            l_value * float(np.sqrt(profile[0])),
            density,
            density * float(density_sd),
            density * float(np.sqrt(profile[1])),
            float(part[0, 1] / (l_sd * density_sd)) if l_sd * density_sd > 0 else NAN,
            status,
        )
    if status == "at-bound":
        return _PathNumbers(status=status)
    return _with_prior(stroke.traces, fit, path, model, ties, settings)


def _with_prior(
    traces: Sequence[PathTrace],
    fit: StrokeFit,
    path: int,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> _PathNumbers:
    """Lean on the climatology where the trace alone is too weak, and say so; no sigma then."""
    prior = Ties(
        ties.sferic,
        ties.lightning_time_s,
        ties.l_value,
        density_prior_dex=settings.density_prior_sd_dex,
    )
    leaning = fit_stroke(
        traces, start=fit.start, lightning_time_s=fit.lightning_time_s, model=model, ties=prior
    )
    if uncertainty_status(leaning, path) != "ok":
        return _PathNumbers()
    l_value, density = leaning.start[path]
    return _PathNumbers(l_value=l_value, density_m3=density, status="prior-dominated")


def _flags(stroke: Stroke, item: PathTrace, sighting: Sighting) -> tuple[str, ...]:
    words = []
    if sum(other.path == item.path for other in stroke.traces) > 1:
        words.append("echo")
    if sighting.thickness_s > DIFFUSE_S:
        words.append("diffuse")
    if stroke.sferic is None and stroke.sferic_probability > AMBIGUOUS:
        words.append("sferic-ambiguous")
    if not stroke.fit.converged:
        words.append("not-converged")
    return tuple(words)
