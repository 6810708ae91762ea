"""Electron density and ion make-up along a field line, as functions of altitude."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fieldlines.constants import EARTH_RADIUS_M, PLASMA_HZ2_M3
from fieldlines.errors import FloatArray, require_within


@dataclass(frozen=True)
class ChapmanLayer:
    r"""A Chapman-alpha ionospheric layer, the same at both ends of the path.

    Parameters
    ----------
    critical_frequency_hz : float
        Ordinary-wave critical frequency of the layer (foF2), Hz, 0 to 3e7; 0 switches it off.
    peak_altitude_m : float
        Altitude of the peak (hmF2), m, 100 to 800 km.
    scale_height_m : float
        Scale height, m, 10 to 200 km.

    Raises
    ------
    DomainError
        If a value is outside its range.

    Examples
    --------
    >>> f"{ChapmanLayer(5e6, 300e3, 60e3).peak_density_m3:.4g} per m^3"
    '3.101e+11 per m^3'
    """

    critical_frequency_hz: float
    peak_altitude_m: float
    scale_height_m: float

    def __post_init__(self) -> None:
        """Check the ranges."""
        advice = "correct the ionosphere settings, or leave the layer out with layer=None"
        for name, low, high, unit in (
            ("critical_frequency_hz", 0.0, 3e7, "Hz"),
            ("peak_altitude_m", 100e3, 800e3, "m"),
            ("scale_height_m", 10e3, 200e3, "m"),
        ):
            require_within(
                name, getattr(self, name), low=low, high=high, unit=unit, next_step=advice
            )

    @property
    def peak_density_m3(self) -> float:
        r"""Electron density at the peak, m^-3.

        .. math:: N_m = f_oF_2^2 \, 4\pi^2\varepsilon_0 m_e / e^2
        """
        return self.critical_frequency_hz**2 / PLASMA_HZ2_M3

    def density(self, altitude_m: npt.ArrayLike) -> FloatArray:
        r"""Return the layer's electron density, m^-3.

        Parameters
        ----------
        altitude_m : array_like
            Altitude, m, any shape.

        Returns
        -------
        ndarray
            Density, m^-3, in the shape of the altitude.

        Notes
        -----
        .. math:: N = N_m \exp\left[\tfrac12 (1 - y - e^{-y})\right], \quad y = (h - h_m)/H

        Chapman (1931), alpha form.
        """
        y, inverse = self._reduced(altitude_m)
        return np.asarray(self.peak_density_m3 * np.exp(0.5 * (1.0 - y - inverse)))

    def density_slope(self, altitude_m: npt.ArrayLike) -> FloatArray:
        """Return the derivative of the layer's density with respect to altitude, m^-4.

        Parameters
        ----------
        altitude_m : array_like
            Altitude, m, any shape.

        Returns
        -------
        ndarray
            Slope, m^-4, in the shape of the altitude.
        """
        _, inverse = self._reduced(altitude_m)
        return np.asarray(self.density(altitude_m) * (inverse - 1.0) / (2.0 * self.scale_height_m))

    def _reduced(self, altitude_m: npt.ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Reduced altitude y and exp(-y)."""
        y = (np.asarray(altitude_m, dtype=np.float64) - self.peak_altitude_m) / self.scale_height_m
        # Below y = -6.5 the density is under 1e-140 of the peak; more would overflow for nothing.
        y = np.maximum(y, -6.5)
        return y, np.exp(-y)


@dataclass(frozen=True)
class IonMixture:
    r"""The share of O+ among the ions as a function of altitude; the rest is H+.

    Parameters
    ----------
    transition_altitude_m : float
        Altitude at which half the ions are O+, m.
    transition_width_m : float
        Width of the transition, m, above 0.

    Raises
    ------
    DomainError
        If a value is not finite or the width is not positive.

    Examples
    --------
    >>> f"{IonMixture().oxygen_fraction(700e3):.2f}"
    '0.50'
    """

    transition_altitude_m: float = 700e3
    transition_width_m: float = 120e3

    def __post_init__(self) -> None:
        """Check the ranges."""
        advice = "correct the ion transition, or leave ions out with ions=None"
        for name, low in (("transition_altitude_m", -np.inf), ("transition_width_m", 1e3)):
            require_within(
                name, getattr(self, name), low=low, high=np.inf, unit="m", next_step=advice
            )

    def oxygen_fraction(self, altitude_m: npt.ArrayLike) -> FloatArray:
        r"""Return the O+ fraction of the ions, 0 to 1.

        Parameters
        ----------
        altitude_m : array_like
            Altitude, m, any shape.

        Returns
        -------
        ndarray
            Fraction, in the shape of the altitude.

        Notes
        -----
        .. math:: \xi = 1 / \left(1 + \exp[(h - h_t)/w]\right)
        """
        z = (np.asarray(altitude_m) - self.transition_altitude_m) / self.transition_width_m
        # The same function as the logistic form, free of overflow.
        return np.asarray(0.5 - 0.5 * np.tanh(0.5 * z))


def electron_density(
    altitude_m: npt.ArrayLike,
    *,
    l_value: float,
    equatorial_density_m3: float,
    density_exponent: float = 1.0,
    layer: ChapmanLayer | None = None,
) -> FloatArray:
    r"""Return the electron density on a field line, m^-3.

    Parameters
    ----------
    altitude_m : array_like
        Altitude, m, any shape.
    l_value : float
        McIlwain L.
    equatorial_density_m3 : float
        Density of the power law at the equator, m^-3.
    density_exponent : float
        Exponent alpha of the power law.
    layer : ChapmanLayer or None
        Layer added at each end.

    Returns
    -------
    ndarray
        Density, m^-3, in the shape of the altitude.

    Notes
    -----
    .. math:: n_e = n_{eq} (L R_E / r)^\alpha + N_\mathrm{layer}(r - R_E)

    Examples
    --------
    >>> density_m3 = electron_density(2 * EARTH_RADIUS_M, l_value=3.0, equatorial_density_m3=1e9)
    >>> f"{density_m3:.1e}"
    '1.0e+09'
    """
    altitude = np.asarray(altitude_m, dtype=np.float64)
    ratio = l_value * EARTH_RADIUS_M / (EARTH_RADIUS_M + altitude)
    power_law = equatorial_density_m3 * ratio**density_exponent
    return np.asarray(power_law if layer is None else power_law + layer.density(altitude))
