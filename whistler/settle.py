"""The fit that a stroke's numbers are from: under the default model, or with what is fitted of it.

The default model stands as long as the traces do not object to it: what they leave open is then the
profile part of the errors. Where they do, which takes the nose in the band, density exponent and F2
layer are fitted with L and density.
"""

from __future__ import annotations

from dataclasses import replace

from fieldlines import FieldLineModel
from fieldlines.constants import SPEED_OF_LIGHT_M_S
from whistler.fit import StrokeFit, fit_stroke
from whistler.group import Stroke
from whistler.problem import Ties
from whistler.scatter import declared_scatter
from whistler.settings import Settings

OBJECTION = 12.0  # fall of chi-square by two more unknowns: by chance once in 400 strokes


def settled(
    stroke: Stroke, ties: Ties, *, model: FieldLineModel, settings: Settings
) -> tuple[Stroke, StrokeFit, Ties]:
    """Return a stroke with the fit that its numbers are from, the open fit, and the ties of both.

    Parameters
    ----------
    stroke : Stroke
        The stroke as grouped.
    ties : Ties
        What is known beside its traces.
    model : fieldlines.FieldLineModel
        The default model.
    settings : Settings
        Declared spreads, and the prior that enters fits.
    """
    if ties.sferic is not None:
        place_s = settings.stroke_distance_sd_m / SPEED_OF_LIGHT_M_S
        ties = replace(ties, sferic=replace(ties.sferic, place_sd_s=place_s))
    if settings.fit_prior != "none":
        ties = leaning(ties, settings, sd_dex=settings.fit_prior_sd_dex)
    fit, opened = _fits(stroke, ties, model, settings)
    return replace(stroke, fit=fit), opened, ties


def leaning(ties: Ties, settings: Settings, *, sd_dex: float) -> Ties:
    """Return the ties with the climatology of the density among them.

    Parameters
    ----------
    ties : Ties
        What is known.
    settings : Settings
        What the climatology is multiplied with.
    sd_dex : float
        How far the density may be from it, decades.
    """
    return replace(
        ties, density_prior_dex=sd_dex, density_prior_factor=settings.density_prior_factor
    )


def _fits(
    stroke: Stroke, ties: Ties, model: FieldLineModel, settings: Settings
) -> tuple[StrokeFit, StrokeFit]:
    """The fit of the numbers, and the one with what the model leaves open."""
    start, start_s = stroke.fit.start, stroke.fit.lightning_time_s
    opened = fit_stroke(
        stroke.traces,
        start=start,
        lightning_time_s=start_s,
        model=model,
        ties=ties,
        scatter=declared_scatter(settings),
        near=stroke.fit,
    )
    # The same points under the default model: what either would drop must not decide.
    held = fit_stroke(
        opened.used, start=start, lightning_time_s=start_s, model=model, ties=ties, robust=False
    )
    unit = max(1.0, opened.chi_square / opened.freedom)
    if held.chi_square - opened.chi_square > OBJECTION * unit:
        return opened, opened
    return held, opened
