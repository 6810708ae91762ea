"""The errors raised by :mod:`fieldlines`, and the range checks that raise them."""

from __future__ import annotations

from functools import partial
from typing import Any

import numpy as np
import numpy.typing as npt

from fieldlines.constants import MAXIMUM_L, MINIMUM_L

FloatArray = npt.NDArray[np.float64]


class FieldlinesError(Exception):
    """Root of every error raised on purpose by :mod:`fieldlines`."""


class DomainError(FieldlinesError, ValueError):
    """An argument lies outside the range in which the physics holds.

    Parameters
    ----------
    argument : str
        Name of the argument.
    value : object
        The offending value.
    allowed : str
        The allowed range, in words or as an interval with its unit.
    next_step : str
        What to do about it.

    Examples
    --------
    >>> print(DomainError("l_value", 0.5, allowed="1.2 to 8", next_step="choose a longer path"))
    l_value=0.5 is outside the allowed range (1.2 to 8); choose a longer path
    """

    def __init__(self, argument: str, value: object, *, allowed: str, next_step: str) -> None:
        shown = f"{value:.8g}" if isinstance(value, float | np.floating) else str(value)
        super().__init__(
            f"{argument}={shown} is outside the allowed range ({allowed}); {next_step}"
        )
        self.argument = argument
        self.value = value
        self.allowed = allowed
        self.next_step = next_step

    def __reduce__(self) -> tuple[Any, ...]:
        """Return what pickle needs, so that the error survives a process boundary."""
        rebuild = partial(type(self), allowed=self.allowed, next_step=self.next_step)
        return rebuild, (self.argument, self.value)


def require_within(
    argument: str,
    value: npt.ArrayLike,
    *,
    low: float,
    high: float,
    next_step: str,
    unit: str = "",
    open_low: bool = False,
    open_high: bool = False,
) -> FloatArray:
    """Return `value` as a float64 array after checking that all of it lies in a range.

    Parameters
    ----------
    argument : str
        Name used in the message.
    value : array_like
        Values to check; NaN and infinity always fail.
    low, high : float
        Ends of the range, in `unit`.
    next_step : str
        Advice put into the message.
    unit : str
        Unit shown in the message.
    open_low, open_high : bool
        Whether the end itself is excluded.

    Returns
    -------
    ndarray
        The values, not copied when they are float64 already.

    Raises
    ------
    DomainError
        If any value is outside, naming the first such value.

    Examples
    --------
    >>> float(require_within("l_value", 3, low=1.2, high=8.0, next_step="change it"))
    3.0
    """
    array = np.asarray(value, dtype=np.float64)
    above = array > low if open_low else array >= low
    below = array < high if open_high else array <= high
    good = above & below & np.isfinite(array)
    if not good.all():
        offender = float(array[~good].flat[0])
        raise DomainError(
            argument,
            offender,
            allowed=_describe(low, high, unit=unit, open_low=open_low, open_high=open_high),
            next_step=next_step,
        )
    return array


def require_l_value(l_value: float) -> float:
    """Return L as a float after checking it against the range of the model.

    Parameters
    ----------
    l_value : float
        McIlwain L, dimensionless, 1.2 to 8.

    Returns
    -------
    float
        The same L.

    Raises
    ------
    DomainError
        If L is outside the range.
    """
    return float(
        require_within(
            "l_value",
            l_value,
            low=MINIMUM_L,
            high=MAXIMUM_L,
            next_step="choose an L the centred-dipole path model covers",
        )
    )


def _describe(low: float, high: float, *, unit: str, open_low: bool, open_high: bool) -> str:
    """Name a range in words, for a message."""
    if not np.isfinite(low) and not np.isfinite(high):
        return "finite"
    lower = f"above {low:.8g}" if open_low else f"{low:.8g}"
    if not np.isfinite(high):
        upper = "" if open_low else " or more"
        return f"{lower}{upper} {unit}".rstrip() + ", finite"
    upper = f"below {high:.8g}" if open_high else f"{high:.8g}"
    return f"{lower} {'and' if open_high else 'to'} {upper} {unit}".rstrip()
