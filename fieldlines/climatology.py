"""How much plasma to expect: a published climatology, for use as a stated, replaceable prior."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from fieldlines.constants import (
    MAXIMUM_L,
    MINIMUM_L,
    SATURATED_DENSITY_INTERCEPT,
    SATURATED_DENSITY_SLOPE,
)
from fieldlines.errors import FloatArray, require_within

#: One-sigma of ln density about :func:`saturated_density` on an ordinary night: a factor of two.
#: A judgement, to be replaced where something better is known. It has to hold refilling (32 % at
#: L = 3, 59 % at L = 5: Sheeley et al. 2001, read second-hand), the annual variation (a factor 1.2
#: to 2 between December and June in the full Carpenter-Anderson formula) and the disagreement of
#: published climatologies (610 to 1390 per cm^3 at L = 3). Outside the plasmapause the density is
#: ten times lower, and this spread does not hold.
AMBIENT_LN_DENSITY_SD = 0.7


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
        low=MINIMUM_L,
        high=MAXIMUM_L,
        next_step="choose an L the climatology covers",
    )
    return np.asarray(
        1e6 * 10.0 ** (SATURATED_DENSITY_SLOPE * line_l + SATURATED_DENSITY_INTERCEPT)
    )
