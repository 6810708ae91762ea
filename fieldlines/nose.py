"""The nose of a whistler and its zero-frequency dispersion."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from fieldlines.line import FieldLineModel, line_nodes
from fieldlines.traveltime import maximum_frequency, plasma_frequency_squared, travel_time


@dataclass(frozen=True)
class Nose:
    """The frequency of least travel time, and that time.

    Parameters
    ----------
    frequency_hz : float
        Nose frequency, Hz; NaN when there is none inside the model's validity.
    time_s : float
        Travel time of one hop there, s; NaN likewise.
    """

    frequency_hz: float
    time_s: float


def nose(l_value: float, *, equatorial_density_m3: float, model: FieldLineModel) -> Nose:
    r"""Return the nose frequency and time of one hop, of the exact index.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    equatorial_density_m3 : float
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        Everything else.

    Returns
    -------
    Nose
        Frequency, Hz, and time, s; NaN when the least time lies outside 5 to 95 % of the
        equatorial gyrofrequency, where the path model does not hold.

    Raises
    ------
    DomainError
        If L or the density is outside its range.

    Notes
    -----
    .. math:: dt/df = 0

    bracketed on a grid, then found as a root of the derivative of the Chebyshev interpolant.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> f"{nose(4.0, equatorial_density_m3=4e8, model=model).frequency_hz:.0f} Hz"
    '5006 Hz'
    """

    def time(frequency_hz: FloatArray) -> FloatArray:
        return travel_time(
            frequency_hz, l_value=l_value, equatorial_density_m3=equatorial_density_m3, model=model
        )

    grid_hz = np.linspace(0.05, 0.95, 46) * maximum_frequency(l_value, model=model)
    best = int(np.argmin(time(grid_hz)))
    if 0 < best < grid_hz.size - 1:
        bracket = (float(grid_hz[best - 1]), float(grid_hz[best + 1]))
        curve = np.polynomial.Chebyshev.interpolate(time, deg=12, domain=bracket)
        roots = curve.deriv().roots()
        real = roots.real[np.abs(roots.imag) < 1e-6 * bracket[0]]
        inside = real[(real > bracket[0]) & (real < bracket[1])]
        if inside.size:
            frequency_hz = float(inside[np.argmin(curve(inside))])
            return Nose(frequency_hz, float(time(np.array([frequency_hz]))[0]))
    return Nose(float("nan"), float("nan"))


def zero_frequency_dispersion(
    l_value: float, *, equatorial_density_m3: float, model: FieldLineModel
) -> float:
    r"""Return the zero-frequency dispersion D0 of one hop, s Hz^(1/2).

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    equatorial_density_m3 : float
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        Everything else.

    Returns
    -------
    float
        D0, s Hz^(1/2), with the ionospheric layers counted.

    Raises
    ------
    DomainError
        If L or the density is outside its range.

    Notes
    -----
    .. math:: D_0 = \frac{1}{2c} \int \frac{f_p}{\sqrt{f_H}} \, ds

    The limit of t sqrt(f) at low frequency in the quasi-longitudinal approximation with electrons
    only (Eckersley 1935 and Storey 1953, from memory). Ions make the true time rise faster below
    about 2 kHz, so the exact t sqrt(f) does not tend to D0.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> d0 = zero_frequency_dispersion(3.0, equatorial_density_m3=9e8, model=model)
    >>> f"{d0:.1f} s Hz^(1/2)"
    '73.3 s Hz^(1/2)'
    """
    nodes = line_nodes(l_value, model=model)
    plasma_hz2 = plasma_frequency_squared(
        nodes, equatorial_density_m3=equatorial_density_m3, model=model
    )
    integrand = np.sqrt(plasma_hz2 / nodes.gyrofrequency_hz)
    return float(np.sum(nodes.weight_m * integrand) / (2.0 * SPEED_OF_LIGHT_M_S))
