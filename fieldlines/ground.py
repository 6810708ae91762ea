"""Positions on the ground in geographic and centred-dipole geomagnetic coordinates.

The Earth is a sphere of 6371.2 km here: geodetic latitude is taken for geocentric, which is wrong
by 0.2 degrees at most and small against the tilt of the real field.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fieldlines.constants import EARTH_RADIUS_M
from fieldlines.dipole import dipole_coefficients
from fieldlines.errors import FloatArray, require_within


def _require_angles(latitude_deg: float, longitude_deg: float) -> None:
    """Check the ranges shared by both kinds of coordinate."""
    advice = "give degrees, north and east positive"
    require_within("latitude_deg", latitude_deg, low=-90.0, high=90.0, unit="deg", next_step=advice)
    require_within(
        "longitude_deg", longitude_deg, low=-360.0, high=360.0, unit="deg", next_step=advice
    )


@dataclass(frozen=True)
class GroundPoint:
    """A geographic position on the ground.

    Parameters
    ----------
    latitude_deg : float
        Geographic latitude, deg, -90 to 90, north positive.
    longitude_deg : float
        Geographic longitude, deg, -360 to 360, east positive.

    Raises
    ------
    DomainError
        If an angle is outside its range.
    """

    latitude_deg: float
    longitude_deg: float

    def __post_init__(self) -> None:
        """Check the ranges."""
        _require_angles(self.latitude_deg, self.longitude_deg)


@dataclass(frozen=True)
class GeomagneticPoint:
    """A centred-dipole geomagnetic position on the ground.

    Parameters
    ----------
    latitude_deg : float
        Geomagnetic latitude, deg, -90 to 90, north positive.
    longitude_deg : float
        Geomagnetic longitude, deg, -360 to 360, east positive, counted from the half meridian
        through the geographic south pole.

    Raises
    ------
    DomainError
        If an angle is outside its range.
    """

    latitude_deg: float
    longitude_deg: float

    def __post_init__(self) -> None:
        """Check the ranges."""
        _require_angles(self.latitude_deg, self.longitude_deg)


def geomagnetic_pole(decimal_year: float) -> GroundPoint:
    r"""Return the north geomagnetic pole of the centred dipole at a date.

    Parameters
    ----------
    decimal_year : float
        Date as a decimal year, 1900 to 2030.

    Returns
    -------
    GroundPoint
        Where the dipole axis leaves the northern hemisphere.

    Raises
    ------
    DomainError
        If the date is outside the IGRF-14 table.

    Notes
    -----
    .. math:: \cos\theta = -g_{10}/B_0, \quad \tan\phi = h_{11}/g_{11}

    with the longitude in the quadrant of (-g11, -h11).

    Examples
    --------
    >>> pole = geomagnetic_pole(2025.0)
    >>> f"{pole.latitude_deg:.3f}, {pole.longitude_deg:.3f}"
    '80.789, -72.763'
    """
    g10, g11, h11 = dipole_coefficients(decimal_year)
    latitude_deg = np.degrees(np.arctan2(-g10, np.hypot(g11, h11)))
    return GroundPoint(float(latitude_deg), float(np.degrees(np.arctan2(-h11, -g11))))


def to_geomagnetic(point: GroundPoint, *, decimal_year: float) -> GeomagneticPoint:
    """Return the centred-dipole geomagnetic coordinates of a ground position.

    Parameters
    ----------
    point : GroundPoint
        Geographic position.
    decimal_year : float
        Date as a decimal year, 1900 to 2030.

    Returns
    -------
    GeomagneticPoint
        The same place in geomagnetic coordinates, longitude -180 to 180.

    Raises
    ------
    DomainError
        If the date is outside the IGRF-14 table.

    Notes
    -----
    A turn about the Earth's axis to the pole's meridian, then one about the new y axis that takes
    the pole to the z axis (Hapgood 1992, Planet. Space Sci. 40, 711, matrix T5; from memory).

    Examples
    --------
    >>> place = to_geomagnetic(GroundPoint(-62.0, 20.0), decimal_year=2025.0)
    >>> f"{place.latitude_deg:.2f}"
    '-61.07'
    """
    vector = _rotation(decimal_year) @ _unit_vector(point.latitude_deg, point.longitude_deg)
    return GeomagneticPoint(*_angles_deg(vector))


def to_geographic(point: GeomagneticPoint, *, decimal_year: float) -> GroundPoint:
    """Return the geographic coordinates of a geomagnetic position.

    Parameters
    ----------
    point : GeomagneticPoint
        Centred-dipole geomagnetic position.
    decimal_year : float
        Date as a decimal year, 1900 to 2030.

    Returns
    -------
    GroundPoint
        The same place in geographic coordinates, longitude -180 to 180.

    Raises
    ------
    DomainError
        If the date is outside the IGRF-14 table.

    Notes
    -----
    The inverse of :func:`to_geomagnetic`.
    """
    vector = _rotation(decimal_year).T @ _unit_vector(point.latitude_deg, point.longitude_deg)
    return GroundPoint(*_angles_deg(vector))


def conjugate_point(point: GroundPoint, *, decimal_year: float) -> GroundPoint:
    """Return where the dipole field line through a ground position meets the other hemisphere.

    Parameters
    ----------
    point : GroundPoint
        Geographic position.
    decimal_year : float
        Date as a decimal year, 1900 to 2030.

    Returns
    -------
    GroundPoint
        The magnetically conjugate position.

    Raises
    ------
    DomainError
        If the date is outside the IGRF-14 table.

    Notes
    -----
    The same geomagnetic longitude and the opposite geomagnetic latitude. The conjugate point of
    the real field may lie several hundred kilometres away.

    Examples
    --------
    >>> conjugate = conjugate_point(GroundPoint(-62.0, 20.0), decimal_year=2025.0)
    >>> f"{to_geomagnetic(conjugate, decimal_year=2025.0).latitude_deg:.2f}"
    '61.07'
    """
    place = to_geomagnetic(point, decimal_year=decimal_year)
    mirrored = GeomagneticPoint(-place.latitude_deg, place.longitude_deg)
    return to_geographic(mirrored, decimal_year=decimal_year)


def ground_distance(start: GroundPoint, *, end: GroundPoint) -> float:
    r"""Return the great-circle distance between two ground positions, m.

    Parameters
    ----------
    start, end : GroundPoint
        The positions.

    Returns
    -------
    float
        Distance, m, on a sphere of 6371.2 km.

    Notes
    -----
    .. math:: d = R_E \operatorname{atan2}(|\mathbf a \times \mathbf b|, \mathbf a \cdot \mathbf b)

    accurate for near and for antipodal positions alike.

    Examples
    --------
    >>> quarter_m = ground_distance(GroundPoint(0.0, 0.0), end=GroundPoint(0.0, 90.0))
    >>> f"{quarter_m / 1e3:.1f} km"
    '10007.9 km'
    """
    first = _unit_vector(start.latitude_deg, start.longitude_deg)
    second = _unit_vector(end.latitude_deg, end.longitude_deg)
    sine = float(np.linalg.norm(np.cross(first, second)))
    return EARTH_RADIUS_M * float(np.arctan2(sine, float(np.sum(first * second))))


def _rotation(decimal_year: float) -> FloatArray:
    """Matrix from geographic to geomagnetic axes."""
    pole = geomagnetic_pole(decimal_year)
    longitude = np.radians(pole.longitude_deg)
    colatitude = np.radians(90.0 - pole.latitude_deg)
    cos_lon, sin_lon = np.cos(longitude), np.sin(longitude)
    cos_tilt, sin_tilt = np.cos(colatitude), np.sin(colatitude)
    return np.array(
        [
            [cos_tilt * cos_lon, cos_tilt * sin_lon, -sin_tilt],
            [-sin_lon, cos_lon, 0.0],
            [sin_tilt * cos_lon, sin_tilt * sin_lon, cos_tilt],
        ]
    )


def _unit_vector(latitude_deg: float, longitude_deg: float) -> FloatArray:
    """Cartesian unit vector of a position."""
    latitude, longitude = np.radians(latitude_deg), np.radians(longitude_deg)
    return np.array(
        [
            np.cos(latitude) * np.cos(longitude),
            np.cos(latitude) * np.sin(longitude),
            np.sin(latitude),
        ]
    )


def _angles_deg(vector: FloatArray) -> tuple[float, float]:
    """Latitude and longitude of a Cartesian vector, deg."""
    x, y, z = vector
    latitude_deg = np.degrees(np.arctan2(z, np.hypot(x, y)))
    return float(latitude_deg), float(np.degrees(np.arctan2(y, x)))
