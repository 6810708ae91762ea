"""From a fitted stroke to catalogue rows: every derived quantity, and honest gaps."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass

from fieldlines import (
    DomainError,
    FieldLineModel,
    maximum_frequency,
    nose,
    tube_content,
    zero_frequency_dispersion,
)
from whistler.evidence import predicted_sferic
from whistler.fit import StrokeFit
from whistler.group import SURE, Stroke
from whistler.pathnumbers import PathNumbers, path_numbers
from whistler.problem import PathTrace, Ties
from whistler.rows import NAN, WhistlerRow
from whistler.settings import Settings
from whistler.settle import settled

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


def stroke_rows(
    stroke: Stroke,
    sightings: Sequence[Sighting],
    *,
    group: int,
    recording: str,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
    receiver_latitude_rad: float | None = None,
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
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver.

    Returns
    -------
    list of WhistlerRow
        In the order of the stroke's traces; `time` is left to the caller, who knows the clock.
    """
    stroke, opened, ties = settled(stroke, ties, model=model, settings=settings)
    numbers = path_numbers(stroke, opened, ties=ties, settings=settings)
    return [
        _row(
            stroke,
            number,
            numbers,
            sighting,
            recording=recording,
            group=group,
            settings=settings,
            ties=ties,
            receiver_latitude_rad=receiver_latitude_rad,
        )
        for number, sighting in enumerate(sightings)
    ]


def _row(
    stroke: Stroke,
    number: int,
    numbers: Sequence[PathNumbers],
    sighting: Sighting,
    *,
    recording: str,
    group: int,
    settings: Settings,
    ties: Ties,
    receiver_latitude_rad: float | None,
) -> WhistlerRow:
    item = stroke.traces[number]
    found = numbers[item.path]
    fit = found.leaning or stroke.fit
    exponent, fo_f2_mhz = _told(fit.model) if math.isfinite(found.l_value) else (NAN, NAN)
    sferic_s, sferic_sd_s = _sferic(stroke, fit, item.hops, settings, receiver_latitude_rad)
    return WhistlerRow(
        recording=recording,
        group=group,
        sferic_time_s=sferic_s,
        sferic_time_sd_s=sferic_sd_s,
        sferic_seen=stroke.sferic is not None,
        sferic_probability=stroke.sferic_probability,
        lightning_time_s=fit.lightning_time_s,
        hops=item.hops,
        hop_probability=stroke.hop_probability,
        l_value=found.l_value,
        l_value_sd=found.l_sd,
        l_value_profile_sd=found.l_profile_sd,
        l_value_low=found.l_low,
        l_value_high=found.l_high,
        equatorial_density_cm3=found.density_m3 / 1e6,
        equatorial_density_sd_cm3=found.density_sd_m3 / 1e6,
        equatorial_density_profile_sd_cm3=found.density_profile_sd_m3 / 1e6,
        equatorial_density_low_cm3=found.density_low_m3 / 1e6,
        equatorial_density_high_cm3=found.density_high_m3 / 1e6,
        l_density_correlation=found.correlation,
        density_exponent=exponent,
        fo_f2_mhz=fo_f2_mhz,
        frequency_low_hz=float(item.trace.frequency_hz.min()),
        frequency_high_hz=float(item.trace.frequency_hz.max()),
        snr_db=sighting.snr_db,
        significance=sighting.significance,
        fit_rms_s=float(fit.rms_s[number]),
        centre_share_sd=item.centre_share_sd,
        uncertainty_status=found.status,
        flags=_flags(stroke, item, sighting, found=found, ties=ties),
        trace=item.trace,
        **asdict(_derived(fit, item.path, found)),
    )


def _sferic(
    stroke: Stroke, fit: StrokeFit, hops: int, settings: Settings, latitude_rad: float | None
) -> tuple[float, float]:
    """Time and one-sigma of the causative sferic: seen, else where the fit has it."""
    if stroke.sferic is not None:
        return stroke.sferic.time_s, stroke.sferic.sd_s
    time_s, sd_s, _ = predicted_sferic(
        fit, hops, settings=settings, receiver_latitude_rad=latitude_rad
    )
    return time_s, sd_s


def _told(model: FieldLineModel) -> tuple[float, float]:
    """What a row tells of its model: density exponent and critical frequency in MHz."""
    layer = model.layer
    return model.density_exponent, NAN if layer is None else 1e-6 * layer.critical_frequency_hz


@dataclass(frozen=True)
class _Derived:
    """One-hop quantities of a fitted path, under the names of the catalogue."""

    dispersion_s_sqrt_hz: float = NAN
    nose_frequency_hz: float = NAN
    nose_time_s: float = NAN
    equatorial_gyrofrequency_hz: float = NAN
    tube_content_m2: float = NAN
    tube_content_sd_m2: float = NAN
    tube_content_profile_sd_m2: float = NAN


def _derived(fit: StrokeFit, path: int, found: PathNumbers) -> _Derived:
    """Derive from the fitted model; D0 is well fixed even where L is not."""
    l_value, density_m3 = fit.start[path]
    model = fit.model
    try:
        dispersion = zero_frequency_dispersion(
            l_value, equatorial_density_m3=density_m3, model=model
        )
        if found.misfit or fit.at_bound[path]:
            return _Derived()
        if not math.isfinite(found.l_value):
            return _Derived(dispersion)
        tip = nose(l_value, equatorial_density_m3=density_m3, model=model)
        content_m2 = tube_content(l_value, equatorial_density_m3=density_m3, model=model)
        return _Derived(
            dispersion,
            tip.frequency_hz,
            tip.time_s,
            maximum_frequency(l_value, model=model),
            content_m2,
            content_m2 * found.log_tube_sd,
            content_m2 * found.log_tube_profile_sd,
        )
    except DomainError:  # a fit that ended on a limit may lie outside a formula's range
        return _Derived()


def _flags(
    stroke: Stroke, item: PathTrace, sighting: Sighting, *, found: PathNumbers, ties: Ties
) -> tuple[str, ...]:
    words = []
    if found.misfit:
        words.append("misfit")
    if ties.l_value is not None:
        words.append("l-given")
    if ties.density_prior_dex is not None:
        words.append("density-prior")
    if stroke.fit.open_sigmas.size:
        words.append("profile-fitted")
    if found.curved:
        words.append("curved-ridge")
    if sum(other.path == item.path for other in stroke.traces) > 1:
        words.append("echo")
    if sighting.thickness_s > DIFFUSE_S:
        words.append("diffuse")
    if stroke.sferic is None and stroke.sferic_probability > AMBIGUOUS:
        words.append("sferic-ambiguous")
    if stroke.hop_probability < SURE:
        words.append("hops-ambiguous")
    if not stroke.fit.converged:
        words.append("not-converged")
    return tuple(words)
