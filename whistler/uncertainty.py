"""What the sigmas contain: the profile part, and whether a number is determined at all."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from fieldlines import ChapmanLayer, FieldLineModel, tube_content
from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit, fit_stroke
from whistler.problem import Ties, expected_log_density
from whistler.settings import Settings

# One-sigmas of ln L and ln density beyond which the numbers are not those of the trace. Where a
# trace says so little, sigma itself depends on where along the valley of good fits the noise put L,
# and the smallest ones come with the largest errors: what is let through must lie well below.
UNDETERMINED_LOG_L = 0.05
UNDETERMINED_LOG_DENSITY = 0.3
MISFIT = 25.0  # chi-square per degree of freedom: points five of their sigmas off
TIE_MISFIT = 5.0  # sigmas
SMALLEST_SHARE = 0.3  # of a layer's frequency or height that a variation leaves
STEP = 1e-4  # of a logarithm, where a derivative is taken by differences
LEANING = 2.0  # a fit that leans on the density prior may be so many times as wide


@dataclass(frozen=True)
class ProfilePart:
    """What the model leaves open, for every path.

    Parameters
    ----------
    log_l, log_density, log_tube_content : ndarray, shape (paths,)
        Variances of ln L, ln density and ln tube content.
    """

    log_l: FloatArray
    log_density: FloatArray
    log_tube_content: FloatArray


def profile_covariance(
    fit: StrokeFit,
    *,
    model: FieldLineModel,
    ties: Ties,
    settings: Settings,
) -> ProfilePart:
    """Return the variances of L, density and tube content from what the model leaves open.

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
    ProfilePart
        Half the change of the fit between plus and minus one sigma of each source, squared and
        summed; each end's tube content is that of its own model, L and density.
    """
    total = np.zeros((len(fit.log_l), 3))
    for low, high in _model_pairs(model, ties, settings):
        ends = [
            _fitted_logs(
                fit_stroke(
                    fit.used,
                    start=fit.start,
                    lightning_time_s=fit.lightning_time_s,
                    model=varied,
                    ties=tie,
                    robust=False,
                ),
                varied,
            )
            for varied, tie in (low, high)
        ]
        total += (0.5 * (ends[1] - ends[0])) ** 2
    return ProfilePart(*total.T)


def _fitted_logs(fit: StrokeFit, model: FieldLineModel) -> FloatArray:
    """Logarithms of L, density and tube content, shape (paths, 3)."""
    pairs = zip(fit.log_l, fit.log_density, strict=True)
    content = [log_tube_content(log_l, log_density, model=model) for log_l, log_density in pairs]
    return np.stack([fit.log_l, fit.log_density, np.array(content)], axis=1)


def log_tube_content(log_l: float, log_density: float, *, model: FieldLineModel) -> float:
    """Return ln of the tube content in m^-2 for ln L and ln density in m^-3."""
    content = tube_content(
        float(np.exp(log_l)), equatorial_density_m3=float(np.exp(log_density)), model=model
    )
    return float(np.log(content))


def tube_content_gradient(fit: StrokeFit, path: int, *, model: FieldLineModel) -> FloatArray:
    """Return the derivatives of ln tube content in ln L and ln density of one path, shape (2,).

    Parameters
    ----------
    fit : StrokeFit
        The fit.
    path : int
        Index of the path.
    model : fieldlines.FieldLineModel
        Its model.
    """
    at = np.array([fit.log_l[path], fit.log_density[path]])
    return np.array(
        [
            (
                log_tube_content(*(at + step), model=model)
                - log_tube_content(*(at - step), model=model)
            )
            / (2.0 * STEP)
            for step in STEP * np.eye(2)
        ]
    )


def data_share(fit: StrokeFit, path: int, *, ties: Ties) -> float:
    """Return how much of what is known of a path's density, beside its climatology, is not prior.

    Parameters
    ----------
    fit : StrokeFit
        A fit that a density prior entered.
    path : int
        Index of the path.
    ties : Ties
        With the prior.

    Returns
    -------
    float
        One less the ratio of the variances after and before, of ln density less the climatology's
        at the same L: 0 when only the prior speaks (below, when the fit is poor), 1 when it adds
        nothing.
    """
    if ties.density_prior_dex is None:
        return 1.0
    _, slope = expected_log_density(fit.log_l[path])
    gradient = np.array([-slope, 1.0])
    after = gradient @ fit.covariance[2 * path : 2 * path + 2, 2 * path : 2 * path + 2] @ gradient
    return float(1.0 - after / (ties.density_prior_dex * np.log(10.0)) ** 2)


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
            ("critical_frequency_hz", settings.critical_frequency_sd_hz),
            ("peak_altitude_m", settings.peak_altitude_sd_m),
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
