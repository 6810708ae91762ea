"""The centred-dipole field and the geometry of its field lines.

Everything follows from r = L RE cos^2(magnetic latitude) and
B = (B0 / L^3) sqrt(1 + 3 x^2) / (1 - x^2)^3 with x = sin(magnetic latitude).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fieldlines.constants import (
    EARTH_RADIUS_M,
    GYRO_HZ_PER_T,
    HIGHEST_FOOT_M,
    IGRF14_DEGREE_ONE_NT,
    IGRF_EDITION,
)
from fieldlines.errors import FloatArray, require_l_value, require_within


def dipole_coefficients(decimal_year: float) -> tuple[float, float, float]:
    """Return the IGRF-14 degree-1 Gauss coefficients g10, g11, h11 at a date, T.

    Parameters
    ----------
    decimal_year : float
        Date as a decimal year, 1900 to 2030.

    Returns
    -------
    tuple of float
        g10, g11, h11 in tesla.

    Raises
    ------
    DomainError
        If the date is outside the table.

    Notes
    -----
    Linear in time between the five-year epochs, as the IGRF prescribes.

    Examples
    --------
    >>> g10, g11, h11 = dipole_coefficients(2022.5)
    >>> f"{g10 * 1e9:.3f} nT"
    '-29376.705 nT'
    """
    epochs = np.array(list(IGRF14_DEGREE_ONE_NT))
    year = require_within(
        "decimal_year",
        decimal_year,
        low=float(epochs[0]),
        high=float(epochs[-1]),
        next_step="give a date the IGRF-14 table covers, or a CentredDipole of your own",
    )
    table = np.array(list(IGRF14_DEGREE_ONE_NT.values())) * 1e-9
    g10, g11, h11 = (float(np.interp(year, epochs, column)) for column in table.T)
    return g10, g11, h11


@dataclass(frozen=True)
class CentredDipole:
    r"""A dipole at the Earth's centre, given by its equatorial surface field.

    Parameters
    ----------
    surface_field_t : float
        Field at the magnetic equator at one Earth radius (6371.2 km), T, 1e-6 to 1e-3.
    reference : str
        Where the number comes from.

    Raises
    ------
    DomainError
        If the surface field is outside its range.

    Examples
    --------
    >>> f"{CentredDipole.from_date(2025.0).surface_field_t * 1e9:.2f} nT"
    '29733.37 nT'
    """

    surface_field_t: float
    reference: str

    def __post_init__(self) -> None:
        """Check the range."""
        require_within(
            "surface_field_t",
            self.surface_field_t,
            low=1e-6,
            high=1e-3,
            unit="T",
            next_step="give the equatorial surface field in tesla (the Earth's is near 3e-5)",
        )

    @classmethod
    def from_date(cls, decimal_year: float) -> CentredDipole:
        r"""Return the dipole of the IGRF-14 degree-1 coefficients at a date.

        Parameters
        ----------
        decimal_year : float
            Date as a decimal year, 1900 to 2030.

        Returns
        -------
        CentredDipole
            The dipole, with the edition and date as its reference.

        Raises
        ------
        DomainError
            If the date is outside the table.

        Notes
        -----
        .. math:: B_0 = \sqrt{g_{10}^2 + g_{11}^2 + h_{11}^2}
        """
        field_t = float(np.sqrt(np.sum(np.square(dipole_coefficients(decimal_year)))))
        return cls(field_t, f"{IGRF_EDITION}, {float(decimal_year):.2f}")

    def field_strength(self, l_value: float, *, magnetic_latitude_rad: npt.ArrayLike) -> FloatArray:
        r"""Return the field strength on a field line, T.

        Parameters
        ----------
        l_value : float
            McIlwain L, 1.2 to 8.
        magnetic_latitude_rad : array_like
            Magnetic latitude, rad, any shape, between -pi/2 and pi/2 exclusive.

        Returns
        -------
        ndarray
            Field strength, T, in the shape of the latitude.

        Raises
        ------
        DomainError
            If L is outside its range.

        Notes
        -----
        .. math:: B = \frac{B_0}{L^3} \frac{\sqrt{1 + 3\sin^2\lambda}}{\cos^6\lambda}

        Examples
        --------
        >>> dipole = CentredDipole(3.12e-5, "round textbook value")
        >>> f"{dipole.field_strength(4.0, magnetic_latitude_rad=0.0) * 1e9:.1f} nT"
        '487.5 nT'
        """
        sine_squared = np.square(np.sin(np.asarray(magnetic_latitude_rad, dtype=np.float64)))
        equatorial_t = self.surface_field_t / require_l_value(l_value) ** 3
        return np.asarray(equatorial_t * np.sqrt(1 + 3 * sine_squared) / (1 - sine_squared) ** 3)

    def equatorial_gyrofrequency(self, l_value: float) -> float:
        r"""Return the electron gyrofrequency at the equator of a field line, Hz.

        Parameters
        ----------
        l_value : float
            McIlwain L, 1.2 to 8.

        Returns
        -------
        float
            Gyrofrequency, Hz.

        Raises
        ------
        DomainError
            If L is outside its range.

        Notes
        -----
        .. math:: f_{Heq} = \frac{e B_0}{2\pi m_e L^3}

        Examples
        --------
        >>> dipole = CentredDipole(3.12e-5, "round textbook value")
        >>> f"{dipole.equatorial_gyrofrequency(3.0):.1f} Hz"
        '32346.9 Hz'
        """
        return GYRO_HZ_PER_T * self.surface_field_t / require_l_value(l_value) ** 3

    def l_from_equatorial_gyrofrequency(self, gyrofrequency_hz: npt.ArrayLike) -> FloatArray:
        r"""Return the L whose equatorial electron gyrofrequency is the given one.

        Parameters
        ----------
        gyrofrequency_hz : array_like
            Equatorial gyrofrequency, Hz, above 0.

        Returns
        -------
        ndarray
            L, dimensionless, in the shape of the argument; not limited to the path model's range.

        Raises
        ------
        DomainError
            If a gyrofrequency is not positive and finite.

        Notes
        -----
        .. math:: L = \left(\frac{e B_0}{2\pi m_e f_{Heq}}\right)^{1/3}

        In the real field this is (M / B)^(1/3) of the equatorial point, which may differ from its
        distance by 3 to 5 % at L 2 to 2.5 (IGRF-14 at 2025.0 against the centred dipole).

        Examples
        --------
        >>> dipole = CentredDipole(3.12e-5, "round textbook value")
        >>> f"{dipole.l_from_equatorial_gyrofrequency(13646.34):.4f}"
        '4.0000'
        """
        frequency_hz = require_within(
            "gyrofrequency_hz",
            gyrofrequency_hz,
            low=0.0,
            high=np.inf,
            open_low=True,
            unit="Hz",
            next_step="give a positive equatorial gyrofrequency",
        )
        return np.asarray(np.cbrt(GYRO_HZ_PER_T * self.surface_field_t / frequency_hz))

    def tube_volume(self, l_value: float, *, altitude_m: float = 100e3) -> float:
        r"""Return the volume of the flux tube between its feet per unit magnetic flux, m^3/Wb.

        Parameters
        ----------
        l_value : float
            McIlwain L, 1.2 to 8.
        altitude_m : float
            Altitude of both feet, m, 0 to 1100 km.

        Returns
        -------
        float
            Integral of ds/B from foot to foot, m/T.

        Raises
        ------
        DomainError
            If L or the altitude is outside its range.

        Notes
        -----
        .. math:: \int \frac{ds}{B} = \frac{2 L^4 R_E}{B_0}
                  \left(x - x^3 + \tfrac{3}{5} x^5 - \tfrac{1}{7} x^7\right)

        with x the sine of the foot's magnetic latitude.
        """
        x = _foot_sine(l_value, altitude_m)
        polynomial = x - x**3 + 3 * x**5 / 5 - x**7 / 7
        return 2 * l_value**4 * EARTH_RADIUS_M / self.surface_field_t * polynomial


def _foot_sine(l_value: float, altitude_m: float) -> float:
    """Sine of the magnetic latitude at which a field line crosses an altitude."""
    altitude = require_within(
        "altitude_m",
        altitude_m,
        low=0.0,
        high=HIGHEST_FOOT_M,
        unit="m",
        next_step="give an altitude between the ground and 1100 km",
    )
    ratio = (1.0 + float(altitude) / EARTH_RADIUS_M) / require_l_value(l_value)
    return float(np.sqrt(1.0 - ratio))


def invariant_latitude(l_value: float) -> float:
    r"""Return the magnetic latitude at which a field line meets the ground, rad.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.

    Returns
    -------
    float
        Invariant latitude, rad.

    Raises
    ------
    DomainError
        If L is outside its range.

    Notes
    -----
    .. math:: \cos^2\Lambda = 1/L

    Examples
    --------
    >>> f"{np.degrees(invariant_latitude(4.0)):.3f} deg"
    '60.000 deg'
    """
    return footpoint_latitude(l_value, altitude_m=0.0)


def footpoint_latitude(l_value: float, *, altitude_m: float = 100e3) -> float:
    r"""Return the magnetic latitude at which a field line crosses an altitude, rad.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    altitude_m : float
        Altitude, m, 0 to 1100 km.

    Returns
    -------
    float
        Magnetic latitude of the northern crossing, rad.

    Raises
    ------
    DomainError
        If L or the altitude is outside its range.

    Notes
    -----
    .. math:: \cos^2\lambda = (1 + h/R_E)/L

    Examples
    --------
    >>> f"{np.degrees(footpoint_latitude(2.0, altitude_m=1000e3)):.4f} deg"
    '40.4849 deg'
    """
    return float(np.arcsin(_foot_sine(l_value, altitude_m)))


def arc_length(l_value: float, *, altitude_m: float = 100e3) -> float:
    r"""Return the length of a field line from foot to foot, m.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    altitude_m : float
        Altitude of both feet, m, 0 to 1100 km.

    Returns
    -------
    float
        Length, m.

    Raises
    ------
    DomainError
        If L or the altitude is outside its range.

    Notes
    -----
    .. math:: S = L R_E \left[x\sqrt{1 + 3x^2} + \operatorname{asinh}(\sqrt3 x)/\sqrt3\right]

    with x the sine of the foot's magnetic latitude.

    Examples
    --------
    >>> f"{arc_length(4.0, altitude_m=0.0) / EARTH_RADIUS_M:.6f} RE"
    '9.004185 RE'
    """
    x = _foot_sine(l_value, altitude_m)
    root_three = np.sqrt(3.0)
    return float(
        l_value
        * EARTH_RADIUS_M
        * (x * np.sqrt(1 + 3 * x**2) + np.arcsinh(root_three * x) / root_three)
    )
