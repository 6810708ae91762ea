"""Models and slow, obvious referees shared by the tests of the physics."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import pytest
from scipy import constants as codata

from fieldlines import CentredDipole, FieldLineModel, IonMixture

EARTH_RADIUS_M = 6371.2e3


@pytest.fixture(scope="session")
def table_model() -> FieldLineModel:
    """The convention of the shared reference tables: 31 200 nT, from 1000 km, electrons only."""
    return FieldLineModel(
        CentredDipole(31200e-9, "reference tables"),
        density_exponent=1.0,
        layer=None,
        ions=None,
        foot_altitude_m=1000e3,
    )


@pytest.fixture(scope="session")
def hydrogen_model(table_model: FieldLineModel) -> FieldLineModel:
    """The same with H+ all along the path: the O+ transition lies far below the ground."""
    return replace(table_model, ions=IonMixture(transition_altitude_m=-1e9))


@pytest.fixture(scope="session")
def default_model() -> FieldLineModel:
    """The tool's default model at 2025.0."""
    return FieldLineModel(CentredDipole.from_date(2025.0))


def slow_group_index(
    frequency_hz: float, *, density_m3: float, field_t: float, oxygen_fraction: float | None
) -> float:
    """Group index from the signed sum over species in SI, one number at a time."""
    omega = 2 * math.pi * frequency_hz
    oxygen_kg = 15.999 * codata.atomic_mass - codata.m_e
    species = [(codata.m_e, -1.0, 1.0)]
    if oxygen_fraction is not None:
        species += [(codata.m_p, 1.0, 1 - oxygen_fraction), (oxygen_kg, 1.0, oxygen_fraction)]
    index_squared, slope = 1.0, 0.0
    for mass_kg, sign, share in species:
        plasma = share * density_m3 * codata.e**2 / (codata.epsilon_0 * mass_kg)
        gyro = sign * codata.e * field_t / mass_kg
        index_squared -= plasma / (omega * (omega + gyro))
        slope += plasma * (2 * omega + gyro) / (omega * (omega + gyro)) ** 2
    index = math.sqrt(index_squared)
    return index + omega * slope / (2 * index)


@pytest.fixture(scope="session")
def slow_integrand() -> Callable[..., float]:
    """Return dt/d(latitude) of the full model in plain Python, for an adaptive quadrature."""

    def integrand(
        latitude_rad: float,
        frequency_hz: float,
        l_value: float,
        density_m3: float,
        model: FieldLineModel,
    ) -> float:
        cosine, sine = math.cos(latitude_rad), math.sin(latitude_rad)
        radius_m = l_value * EARTH_RADIUS_M * cosine**2
        altitude_m = radius_m - EARTH_RADIUS_M
        density = density_m3 * cosine ** (-2 * model.density_exponent)
        if model.layer is not None:
            y = (altitude_m - model.layer.peak_altitude_m) / model.layer.scale_height_m
            peak_m3 = model.layer.critical_frequency_hz**2 * (
                4 * math.pi**2 * codata.epsilon_0 * codata.m_e / codata.e**2
            )
            density += peak_m3 * math.exp(0.5 * (1 - y - math.exp(-y)))
        oxygen = None
        if model.ions is not None:
            z = (altitude_m - model.ions.transition_altitude_m) / model.ions.transition_width_m
            oxygen = 1 / (1 + math.exp(z)) if z < 700 else 0.0
        stretch = math.sqrt(1 + 3 * sine**2)
        field_t = model.dipole.surface_field_t / l_value**3 * stretch / cosine**6
        index = slow_group_index(
            frequency_hz, density_m3=density, field_t=field_t, oxygen_fraction=oxygen
        )
        return index * l_value * EARTH_RADIUS_M * cosine * stretch / codata.c

    return integrand
