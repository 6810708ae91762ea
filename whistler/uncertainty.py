"""What the sigmas contain: the profile part, and whether a number is determined at all."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from fieldlines import ChapmanLayer, FieldLineModel
from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit, fit_stroke
from whistler.problem import Ties
from whistler.settings import Settings

# One-sigmas of ln L and ln density beyond which the numbers are not those of the trace. Where a
# trace says so little, sigma itself depends on where along the valley of good fits the noise put L,
# and the smallest ones come with the largest errors: what is let through must lie well below.
UNDETERMINED_LOG_L = 0.05
UNDETERMINED_LOG_DENSITY = 0.3
MISFIT = 25.0  # chi-square per degree of freedom: points five of their sigmas off
TIE_MISFIT = 5.0  # sigmas
SMALLEST_SHARE = 0.3  # of a layer's frequency or height that a variation leaves
LEANING = 2.0  # a fit that leans on the density prior may be so many times as wide


def profile_covariance(
    fit: StrokeFit,
    *,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> FloatArray:
    """Return the variance of ln L and ln density from what the model leaves open.

    Parameters
    ----------
    fit : StrokeFit
        The fit under the default model.
    model : fieldlines.FieldLineModel
        The default model.
    ties : Ties
        The ties of the fit.
    settings : Settings
        Declared one-sigmas: density exponent, foF2, hmF2, stroke distance.

    Returns
    -------
    ndarray, shape (paths, 2)
        Variances of ln L and ln density: half the change of the fit between plus and minus one
        sigma of each source, squared and summed.
    """
    start = fit.start
    total = np.zeros((len(start), 2))
    for low, high in _model_pairs(model, ties, settings):
        ends = [
            fit_stroke(
                fit.used,
                start=start,
                lightning_time_s=fit.lightning_time_s,
                model=varied,
                ties=tie,
                robust=False,
            )
            for varied, tie in (low, high)
        ]
        change = np.stack(
            [ends[1].log_l - ends[0].log_l, ends[1].log_density - ends[0].log_density], axis=1
        )
        total += (0.5 * change) ** 2
    return total


_Variant = tuple[FieldLineModel, Ties]


def _model_pairs(
    model: FieldLineModel, ties: Ties, settings: Settings
) -> list[tuple[_Variant, _Variant]]:
    """The model one sigma below and above its default, source by source."""
    pairs: list[tuple[_Variant, _Variant]] = []
    exponents = [
        max(model.density_exponent + sign * settings.density_exponent_sd, 0.0) for sign in (-1, 1)
    ]
    low, high = (replace(model, density_exponent=value) for value in exponents)
    pairs.append(((low, ties), (high, ties)))
    if model.layer is not None:
        for name, spread in (
            ("critical_frequency_hz", settings.fo_f2_sd_mhz * 1e6),
            ("peak_altitude_m", settings.hm_f2_sd_km * 1e3),
        ):
            low, high = (
                replace(model, layer=_shifted(model.layer, name, sign * spread)) for sign in (-1, 1)
            )
            pairs.append(((low, ties), (high, ties)))
    if ties.sferic is not None:
        way_s = settings.stroke_distance_sd_m / SPEED_OF_LIGHT_M_S
        early, late = (
            replace(ties, sferic=replace(ties.sferic, time_s=ties.sferic.time_s + sign * way_s))
            for sign in (-1, 1)
        )
        pairs.append(((model, early), (model, late)))
    return pairs


def _shifted(layer: ChapmanLayer, name: str, by: float) -> ChapmanLayer:
    value = getattr(layer, name)
    return replace(layer, **{name: max(value + by, SMALLEST_SHARE * value)})


def uncertainty_status(
    fit: StrokeFit, path: int, *, l_range: tuple[float, float], leniency: float = 1.0
) -> str:
    """Return ``ok``, ``at-bound``, ``misfit`` or ``undetermined`` for one path of a fit.

    Parameters
    ----------
    fit : StrokeFit
        The fit.
    path : int
        Index of the path.
    l_range : tuple of float
        L outside which nothing was searched.
    leniency : float
        Factor on the sigmas from which a number counts as undetermined.

    Returns
    -------
    str
        ``misfit`` where the points, or the ties, lie many of their sigmas off the model: no sigma
        scaled up to cover that means anything.
    """
    inside = l_range[0] <= np.exp(fit.log_l[path]) <= l_range[1]
    if fit.at_bound[path] or not inside:
        return "at-bound"
    if fit.chi_square > MISFIT * fit.freedom or fit.tie_misfit > TIE_MISFIT:
        return "misfit"
    sd = np.sqrt(np.diag(fit.covariance)[2 * path : 2 * path + 2])
    limits = leniency * np.array([UNDETERMINED_LOG_L, UNDETERMINED_LOG_DENSITY])
    return "ok" if np.isfinite(sd).all() and np.all(sd <= limits) else "undetermined"
