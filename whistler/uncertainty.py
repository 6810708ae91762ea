"""What the sigmas contain: the profile part, and whether a number is determined at all."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from fieldlines import FieldLineModel, tube_content
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit
from whistler.problem import Ties, expected_log_density
from whistler.scatter import ModelScatter

# One-sigmas of ln L and ln density beyond which the numbers are not those of the trace. Where a
# trace says so little, sigma itself depends on where along the valley of good fits the noise put L,
# and the smallest ones come with the largest errors: what is let through must lie well below.
UNDETERMINED_LOG_L = 0.05
UNDETERMINED_LOG_DENSITY = 0.3
MISFIT = 25.0  # chi-square per degree of freedom: points five of their sigmas off
TIE_MISFIT = 5.0  # sigmas
SHAPE = (
    1.3  # real profiles are no power laws; what the sigma from those is widened by (our estimate)
)
STEP = 1e-4  # of a logarithm, where a derivative is taken by differences
LEANING = 2.0  # a fit that leans on the density prior may be so many times as wide


@dataclass(frozen=True)
class ProfilePart:
    """What the model leaves open, for every path.

    Parameters
    ----------
    log_l, log_density, log_tube : ndarray, shape (paths,)
        Variances of ln L, ln density and ln tube content.
    """

    log_l: FloatArray
    log_density: FloatArray
    log_tube: FloatArray


def profile_part(fit: StrokeFit, opened: StrokeFit, *, scatter: ModelScatter) -> ProfilePart:
    """Return the variances of L, density and tube content from what the model leaves open.

    Parameters
    ----------
    fit : StrokeFit
        The fit that the numbers are from.
    opened : StrokeFit
        The same traces with what the model leaves open fitted too; may be `fit` itself.
    scatter : ModelScatter
        The declared spreads that `opened` was fitted with.

    Returns
    -------
    ProfilePart
        Mean square of what the numbers change by when the model is any of those that the traces
        allow: how far `opened` is from `fit`, squared, and what of its covariance is not noise.

    Notes
    -----
    With departures z of the model, of which the traces leave mean m and covariance S, and numbers
    that change by b per unit of them, the mean square is ``b (m m' + S) b'``: that of the declared
    spread where the traces say nothing of the model, and little where the nose is in the band.
    """
    own = len(fit.covariance)
    left = np.diag(opened.total_covariance)[: own - 1] - np.diag(fit.covariance)[:-1]
    moved = np.stack([opened.log_l - fit.log_l, opened.log_density - fit.log_density])
    content = np.array(
        [_content_part(fit, opened, path, scatter) for path in range(len(fit.log_l))]
    )
    left = np.maximum(left, 0.0)
    return ProfilePart(
        SHAPE**2 * (left[0::2] + moved[0] ** 2),
        SHAPE**2 * (left[1::2] + moved[1] ** 2),
        SHAPE**2 * content,
    )


def _content_part(fit: StrokeFit, opened: StrokeFit, path: int, scatter: ModelScatter) -> float:
    own, place = len(fit.covariance), [2 * path, 2 * path + 1]
    slope = tube_content_gradient(opened, path)
    whole = np.append(slope, _content_by_model(opened, path, scatter))
    wide = [*place, *range(own, len(opened.total_covariance))]
    variance = float(whole @ opened.total_covariance[np.ix_(wide, wide)] @ whole)
    noise = float(slope @ fit.covariance[np.ix_(place, place)] @ slope)
    moved = _log_content(opened, path) - _log_content(fit, path)
    return max(variance - noise, 0.0) + moved**2


def _content_by_model(fit: StrokeFit, path: int, scatter: ModelScatter) -> FloatArray:
    """Change of ln tube content with what the model leaves open, per sigma, shape (2,)."""
    step = 0.1
    here = _log_content(fit, path)
    variants = [replace(fit, model=scatter.moved(fit.model, step * one)) for one in np.eye(2)]
    return np.array([(_log_content(varied, path) - here) / step for varied in variants])


def _log_content(fit: StrokeFit, path: int) -> float:
    return log_tube_content(fit.log_l[path], fit.log_density[path], model=fit.model)


def log_tube_content(log_l: float, log_density: float, *, model: FieldLineModel) -> float:
    """Return ln of the tube content in m^-2 for ln L and ln density in m^-3."""
    content = tube_content(
        float(np.exp(log_l)), equatorial_density_m3=float(np.exp(log_density)), model=model
    )
    return float(np.log(content))


def tube_content_gradient(fit: StrokeFit, path: int) -> FloatArray:
    """Return the derivatives of ln tube content in ln L and ln density of one path, shape (2,).

    Parameters
    ----------
    fit : StrokeFit
        The fit.
    path : int
        Index of the path.
    """
    at = np.array([fit.log_l[path], fit.log_density[path]])
    return np.array(
        [
            (
                log_tube_content(*(at + step), model=fit.model)
                - log_tube_content(*(at - step), model=fit.model)
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
