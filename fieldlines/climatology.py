"""How much plasma to expect: a published climatology, for use as a stated, replaceable prior."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from fieldlines.constants import (
    SATURATED_DENSITY_INTERCEPT,
    SATURATED_DENSITY_SLOPE,
)
from fieldlines.errors import FloatArray, require_within


def saturated_density(l_value: npt.ArrayLike) -> FloatArray:
    r"""Return the equatorial electron density of the saturated plasmasphere, m^-3.

    Parameters
    ----------
    l_value : array_like
        McIlwain L, any shape, 1.2 to 8. The fit was made for 2.25 to 8 (from memory).

    Returns
    -------
    ndarray
        Density, m^-3, in the shape of L.

    Raises
    ------
    DomainError
        If L is outside its range.

    Notes
    -----
    .. math:: \log_{10} n_e [\mathrm{cm}^{-3}] = -0.3145 L + 3.9043

    Carpenter and Anderson (1992, J. Geophys. Res. 97, 1097), without the terms for season and
    solar cycle. The constants were read second-hand, in two public codes that agree, not in the
    paper.

    Examples
    --------
    >>> f"{saturated_density(4.0) / 1e6:.1f} per cm^3"
    '442.9 per cm^3'
    """
    line_l = require_within(
        "l_value",
        l_value,
        low=1.2,
        high=8.0,
        next_step="choose an L the climatology covers",
    )
    return np.asarray(
        1e6 * 10.0 ** (SATURATED_DENSITY_SLOPE * line_l + SATURATED_DENSITY_INTERCEPT)
    )
