"""The dipole: its moment by date, and the geometry of its lines."""

from __future__ import annotations

import datetime
import importlib.resources

import numpy as np
import pytest
from scipy import constants as codata
from scipy.integrate import quad

from fieldlines import (
    CentredDipole,
    DomainError,
    arc_length,
    dipole_coefficients,
    footpoint_latitude,
    invariant_latitude,
)
from fieldlines.constants import CODATA_EDITION, GYRO_HZ_PER_T, IGRF14_DEGREE_ONE_NT, PLASMA_HZ2_M3

EARTH_RADIUS_M = 6371.2e3
CLASSIC = CentredDipole(31200e-9, "shared tables")


def test_coefficients_equal_the_shipped_igrf_file() -> None:
    """Reference (IGRF-14 coefficient file shipped with ppigrf): all epochs, digit for digit."""
    text = importlib.resources.files("ppigrf").joinpath("IGRF14.shc").read_text()
    lines = [line.split() for line in text.splitlines() if not line.startswith("#")]
    rows = {(row[0], row[1]): [float(value) for value in row[2:]] for row in lines[2:]}
    epochs = [float(value) for value in lines[1]]
    shipped = dict(
        zip(epochs, zip(rows["1", "0"], rows["1", "1"], rows["1", "-1"], strict=True), strict=True)
    )
    assert shipped == IGRF14_DEGREE_ONE_NT


@pytest.mark.parametrize("year", [1965, 2010, 2025])
def test_coefficients_are_the_projection_of_the_field(year: int) -> None:
    """Reference (IGRF-14 via ppigrf): degree-1 part of the synthesised field, to 0.01 nT.

    Gauss-Legendre in colatitude times a uniform sum in longitude is exact for degree 13.
    """
    import ppigrf

    node, weight = np.polynomial.legendre.leggauss(16)
    longitude = np.arange(32) * 360.0 / 32
    colatitude, east = (a.ravel() for a in np.meshgrid(np.degrees(np.arccos(node)), longitude))
    radial, _, _ = ppigrf.igrf_gc(6371.2, colatitude, east, datetime.datetime(year, 1, 1))
    area = np.tile(weight, 32) * 2 * np.pi / 32
    theta, phi = np.radians(colatitude), np.radians(east)
    harmonics = (np.cos(theta), np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi))
    # B_r of degree 1 at the reference radius is 2 g P, and the integral of P^2 is 4 pi / 3.
    projected = [3 / (8 * np.pi) * float(np.sum(area * radial * p)) for p in harmonics]
    np.testing.assert_allclose(np.array(dipole_coefficients(year)) * 1e9, projected, atol=0.01)


@pytest.mark.parametrize(
    ("year", "field_nt"),
    [(1965, 30951.64), (1995, 30215.08), (2010, 29950.13), (2025, 29733.37), (2030, 29652.57)],
)
def test_surface_field_by_date(year: float, field_nt: float) -> None:
    """Reference (IGRF-14, shared table 2b): sqrt(g10^2 + g11^2 + h11^2), printed to 0.01 nT."""
    dipole = CentredDipole.from_date(year)
    assert dipole.surface_field_t * 1e9 == pytest.approx(field_nt, abs=0.006)
    assert "IGRF-14" in dipole.reference
    assert str(year) in dipole.reference


def test_coefficients_are_linear_in_time() -> None:
    """Identity: a date two fifths into an interval takes two fifths of the change."""
    early, late = np.array(dipole_coefficients(2020)), np.array(dipole_coefficients(2025))
    np.testing.assert_allclose(dipole_coefficients(2022), early + 0.4 * (late - early), rtol=1e-14)


def test_derived_constants() -> None:
    """Reference (contract: nm = foF2^2/80.616; shared notes: 8978.663 Hz, 27.99249 Hz/nT)."""
    assert pytest.approx(80.616, rel=1e-5) == PLASMA_HZ2_M3  # five digits printed
    assert np.sqrt(PLASMA_HZ2_M3 * 1e6) == pytest.approx(8978.663, abs=6e-4)
    assert pytest.approx(27.99249, abs=6e-6) == GYRO_HZ_PER_T * 1e-9
    year = CODATA_EDITION.removeprefix("CODATA ")
    # CODATA electron mass by edition, from memory.
    mass_kg = {"2022": 9.1093837139e-31, "2018": 9.1093837015e-31}[year]
    assert mass_kg == codata.m_e


GEOMETRY = """
1.5 35.26439 34.62593 28.56931 12420.252 10098.160 3.878322 258.775017
2 45.00000 44.55033 40.48486 21612.651 19561.741 14.011004 109.170710
3 54.73561 54.41828 51.61015 39467.210 37543.584 73.516904 32.346877
4 60.00000 59.74107 57.46535 57159.216 55277.143 233.545529 13.646339
5 63.43495 63.21078 61.24721 74802.459 72941.025 570.931983 6.986925
7 67.79235 67.60937 66.01197 110035.374 108194.494 2194.718986 2.546256
"""


@pytest.mark.parametrize("row", GEOMETRY.strip().splitlines())
def test_geometry_table(row: str) -> None:
    """Reference (shared table 2a, quadrature there): latitudes, lengths, volume, gyrofrequency.

    Tolerances are half the last printed digit.
    """
    l_value, inv, lat100, lat1000, s100, s1000, volume, gyro = map(float, row.split())
    assert np.degrees(invariant_latitude(l_value)) == pytest.approx(inv, abs=6e-6)
    assert np.degrees(footpoint_latitude(l_value)) == pytest.approx(lat100, abs=6e-6)
    assert np.degrees(footpoint_latitude(l_value, altitude_m=1e6)) == pytest.approx(
        lat1000, abs=6e-6
    )
    assert arc_length(l_value) / 1e3 == pytest.approx(s100, abs=6e-4)
    assert arc_length(l_value, altitude_m=1e6) / 1e3 == pytest.approx(s1000, abs=6e-4)
    unit = EARTH_RADIUS_M / CLASSIC.surface_field_t
    assert CLASSIC.tube_volume(l_value, altitude_m=1e6) / unit == pytest.approx(volume, abs=6e-7)
    assert CLASSIC.equatorial_gyrofrequency(l_value) / 1e3 == pytest.approx(gyro, abs=6e-7)


@pytest.mark.parametrize("l_value", [1.25, 2.0, 4.0, 7.5])
def test_arc_length_and_volume_by_quadrature(l_value: float) -> None:
    """Reference (scipy.integrate.quad of ds and ds/B from r = L RE cos^2): to 1e-12."""
    latitude_rad = np.arccos(np.sqrt((1 + 300e3 / EARTH_RADIUS_M) / l_value))

    def step(angle: float) -> float:
        return l_value * EARTH_RADIUS_M * np.cos(angle) * np.sqrt(1 + 3 * np.sin(angle) ** 2)

    def tube(angle: float) -> float:
        strength = CLASSIC.surface_field_t * np.sqrt(1 + 3 * np.sin(angle) ** 2)
        return step(angle) / (strength / (l_value * np.cos(angle) ** 2) ** 3)

    length_m = 2 * quad(step, 0, latitude_rad, epsrel=1e-13)[0]
    volume = 2 * quad(tube, 0, latitude_rad, epsrel=1e-13)[0]
    assert arc_length(l_value, altitude_m=300e3) == pytest.approx(length_m, rel=1e-12)
    assert CLASSIC.tube_volume(l_value, altitude_m=300e3) == pytest.approx(volume, rel=1e-12)


def test_whole_line_length() -> None:
    """Reference (elementary integral): 2.760346 L RE to the centre, approached as L grows.

    What lies below the ground is the radial stretch RE at each end, longer by a share of 1/L.
    """
    whole = (2 + np.arcsinh(np.sqrt(3)) / np.sqrt(3)) * 8.0
    assert whole / 8.0 == pytest.approx(2.760346, abs=5e-7)
    below = whole - arc_length(8.0, altitude_m=0.0) / EARTH_RADIUS_M
    assert 2.0 < below < 2.0 * (1 + 0.25 / 8.0)


def test_l_from_gyrofrequency_inverts() -> None:
    """Identity: L -> equatorial gyrofrequency -> L; and 873.366 kHz at L = 1 (shared table)."""
    l_values = np.array([1.3, 2.5, 4.0, 7.9])
    gyro_hz = np.array([CLASSIC.equatorial_gyrofrequency(value) for value in l_values])
    np.testing.assert_allclose(
        CLASSIC.l_from_equatorial_gyrofrequency(gyro_hz), l_values, rtol=1e-14
    )
    assert CLASSIC.l_from_equatorial_gyrofrequency(873.366e3) == pytest.approx(1.0, abs=1e-6)


def test_field_strength_matches_the_vector_dipole() -> None:
    """Reference (B = B0 (RE/r)^3 (2 sin, cos), textbook components): to rounding."""
    latitude_rad = np.radians([0.0, 20.0, 50.0])
    radius = 3.0 * np.cos(latitude_rad) ** 2
    components = np.array([2 * np.sin(latitude_rad), np.cos(latitude_rad)])
    expected = CLASSIC.surface_field_t * np.linalg.norm(components, axis=0) / radius**3
    found = CLASSIC.field_strength(3.0, magnetic_latitude_rad=latitude_rad)
    np.testing.assert_allclose(found, expected, rtol=1e-14)


def test_bad_values_are_named() -> None:
    """Identity: messages for a bad date, field, L, altitude and gyrofrequency."""
    with pytest.raises(DomainError, match=r"decimal_year=2031 .*\(1900 to 2030\); give a date"):
        CentredDipole.from_date(2031)
    with pytest.raises(DomainError, match=r"surface_field_t=31200 .*T\); give"):
        CentredDipole(31200.0, "forgot the nano")
    with pytest.raises(DomainError, match=r"l_value=1.1 .*\(1.2 to 8\); choose"):
        CLASSIC.equatorial_gyrofrequency(1.1)
    with pytest.raises(DomainError, match=r"altitude_m=2000000 .*\(0 to 1100000 m\)"):
        arc_length(4.0, altitude_m=2e6)
    with pytest.raises(DomainError, match=r"gyrofrequency_hz=-1 .*\(above 0 Hz, finite\)"):
        CLASSIC.l_from_equatorial_gyrofrequency([1e4, -1.0])
