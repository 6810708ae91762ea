"""Geomagnetic coordinates, conjugate points and distances on the ground."""

from __future__ import annotations

import numpy as np
import pytest

from fieldlines import (
    DomainError,
    GeomagneticPoint,
    GroundPoint,
    conjugate_point,
    dipole_coefficients,
    geomagnetic_pole,
    ground_distance,
    to_geographic,
    to_geomagnetic,
)

PLACES = [(-62.0, 20.0), (47.3, -120.0), (0.0, 0.0), (12.0, 179.9), (-89.0, 45.0)]


@pytest.mark.parametrize(
    ("year", "latitude_deg", "longitude_deg"),
    [(1965, 78.535, -69.854), (2000, 79.543, -71.570), (2025, 80.789, -72.763)],
)
def test_pole_by_date(year: float, latitude_deg: float, longitude_deg: float) -> None:
    """Reference (IGRF-14, shared table 2b): north geomagnetic pole to the printed digits."""
    pole = geomagnetic_pole(year)
    assert pole.latitude_deg == pytest.approx(latitude_deg, abs=6e-4)
    assert pole.longitude_deg == pytest.approx(longitude_deg, abs=6e-4)


@pytest.mark.parametrize(("latitude_deg", "longitude_deg"), PLACES)
def test_geomagnetic_latitude_from_the_potential(latitude_deg: float, longitude_deg: float) -> None:
    """Reference (degree-1 potential g10 P10 + ..., IGRF definition): sin(latitude) = -V / B0."""
    g10, g11, h11 = dipole_coefficients(2025.0)
    latitude, longitude = np.radians(latitude_deg), np.radians(longitude_deg)
    equatorward = g11 * np.cos(longitude) + h11 * np.sin(longitude)
    potential = g10 * np.sin(latitude) + equatorward * np.cos(latitude)
    expected = np.arcsin(-potential / np.sqrt(g10**2 + g11**2 + h11**2))
    found = to_geomagnetic(GroundPoint(latitude_deg, longitude_deg), decimal_year=2025.0)
    assert np.radians(found.latitude_deg) == pytest.approx(expected, abs=1e-12)


def test_geomagnetic_longitude_convention() -> None:
    """Reference (Hapgood 1992, from memory): the geographic south pole has longitude 0.

    East of it on the map is east in geomagnetic longitude too.
    """
    south = to_geomagnetic(GroundPoint(-90.0, 0.0), decimal_year=2025.0)
    assert south.longitude_deg == pytest.approx(0.0, abs=1e-9)
    pole = geomagnetic_pole(2025.0)
    east = to_geomagnetic(GroundPoint(0.0, pole.longitude_deg + 30.0), decimal_year=2025.0)
    assert 0.0 < east.longitude_deg < 60.0


@pytest.mark.parametrize(("latitude_deg", "longitude_deg"), PLACES)
def test_conversions_invert(latitude_deg: float, longitude_deg: float) -> None:
    """Identity: there and back is the same place; so is the conjugate of the conjugate."""
    start = GroundPoint(latitude_deg, longitude_deg)
    back = to_geographic(to_geomagnetic(start, decimal_year=2025.0), decimal_year=2025.0)
    twice = conjugate_point(conjugate_point(start, decimal_year=2025.0), decimal_year=2025.0)
    assert ground_distance(start, end=back) < 1e-3  # a millimetre: rounding of degrees
    assert ground_distance(start, end=twice) < 1e-3


def test_conjugate_distance() -> None:
    """Reference (contract): the feet of a line lie 2 Lambda RE apart, cos^2(Lambda) = 1/L."""
    l_value = 3.0
    latitude_deg = np.degrees(np.arccos(np.sqrt(1 / l_value)))
    start = to_geographic(GeomagneticPoint(latitude_deg, 77.0), decimal_year=2025.0)
    end = conjugate_point(start, decimal_year=2025.0)
    expected_m = 2 * np.radians(latitude_deg) * 6371.2e3
    assert ground_distance(start, end=end) == pytest.approx(expected_m, rel=1e-12)


@pytest.mark.parametrize(
    ("first", "second", "angle_deg"),
    [
        ((0, 0), (0, 90), 90),
        ((90, 5), (-90, 77), 180),
        ((10, 20), (10, 20), 0),
        ((30, 0), (60, 180), 90),
    ],
)
def test_great_circle(
    first: tuple[float, float], second: tuple[float, float], angle_deg: float
) -> None:
    """Reference (spherical geometry by inspection): distances of simple pairs, to a millimetre."""
    found_m = ground_distance(GroundPoint(*first), end=GroundPoint(*second))
    assert found_m == pytest.approx(np.radians(angle_deg) * 6371.2e3, abs=1e-3)


def test_bad_positions_are_named() -> None:
    """Identity: an impossible angle is refused with its name, value and range."""
    with pytest.raises(DomainError, match=r"latitude_deg=91 .*\(-90 to 90 deg\); give degrees"):
        GroundPoint(91.0, 0.0)
    with pytest.raises(DomainError, match=r"longitude_deg=inf"):
        GeomagneticPoint(0.0, np.inf)
