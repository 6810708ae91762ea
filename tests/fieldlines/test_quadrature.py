"""The quadrature against independent referees, and the Jacobian against differences of it."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import replace

import mpmath
import numpy as np
import pytest
from scipy import constants as codata
from scipy.integrate import quad

from fieldlines import (
    ChapmanLayer,
    FieldLineModel,
    maximum_frequency,
    travel_time,
    travel_time_jacobian,
)

EARTH_RADIUS_M = 6371.2e3


@pytest.mark.parametrize(
    ("l_value", "density_m3", "frequency_hz"), [(2.2, 1.6e9, 3000.0), (4.0, 4e8, 6000.0)]
)
def test_default_model_against_mpmath(
    l_value: float, density_m3: float, frequency_hz: float, default_model: FieldLineModel
) -> None:
    """Reference (mpmath tanh-sinh, 20 digits, formula written anew in altitude): 1e-11.

    The default model: Chapman layer, O+ and H+, IGRF-14 field at 2025.0.
    """
    mp = mpmath.mp.clone()
    mp.dps = 20
    me, mh = mp.mpf(codata.m_e), mp.mpf(codata.m_p)
    mo = mp.mpf(15.999 * codata.atomic_mass) - me
    charge, eps0 = mp.mpf(codata.e), mp.mpf(codata.epsilon_0)
    radius_earth, omega = mp.mpf(EARTH_RADIUS_M), 2 * mp.pi * mp.mpf(frequency_hz)
    peak = mp.mpf(5e6) ** 2 * 4 * mp.pi**2 * eps0 * me / charge**2

    def integrand(latitude: mpmath.mpf) -> mpmath.mpf:
        x = mp.sin(latitude)
        radius = l_value * radius_earth * (1 - x * x)
        height = radius - radius_earth
        y = (height - 300000) / 60000
        density = density_m3 * l_value * radius_earth / radius
        density += peak * mp.exp((1 - y - mp.exp(-y)) / 2)
        field = default_model.dipole.surface_field_t * (radius_earth / radius) ** 3
        field *= mp.sqrt(1 + 3 * x * x)
        oxygen = 1 / (1 + mp.exp((height - 700000) / 120000))
        square, weighted = mp.mpf(1), mp.mpf(1)
        for mass, sign, share in ((me, -1, 1), (mo, 1, oxygen), (mh, 1, 1 - oxygen)):
            plasma = share * density * charge**2 / (eps0 * mass)
            gyro = sign * charge * field / mass
            square -= plasma / (omega * (omega + gyro))
            weighted -= plasma * gyro / (2 * omega * (omega + gyro) ** 2)
        path = l_value * radius_earth * mp.cos(latitude) * mp.sqrt(1 + 3 * x * x)
        return weighted / mp.sqrt(square) * path / codata.c

    heights = [100e3, 130e3, 160e3, 200e3, 250e3, 300e3, 450e3, 700e3, 1200e3, 2500e3]
    corners = [mp.acos(mp.sqrt((1 + h / radius_earth) / l_value)) for h in heights]
    expected = 2 * mp.quad(integrand, [mp.mpf(0), *reversed(corners)], maxdegree=6)
    found = travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=default_model
    )
    assert found[0] == pytest.approx(float(expected), rel=1e-11)


def random_case(
    rng: np.random.Generator, model: FieldLineModel
) -> tuple[float, float, float, FieldLineModel]:
    """L, density, a frequency share and a model over the whole stated range."""
    layer = ChapmanLayer(rng.uniform(0, 12e6), rng.uniform(250e3, 400e3), rng.uniform(40e3, 80e3))
    l_value = rng.uniform(1.25, 7.0)
    density_m3 = 10 ** (9.9043 - 0.3145 * l_value + rng.uniform(-1.5, 0.5))
    varied = replace(model, density_exponent=rng.uniform(0, 4), layer=layer)
    return l_value, density_m3, rng.uniform(0.01, 0.9), varied


@pytest.mark.parametrize("seed", range(24))
def test_quadrature_against_adaptive(
    seed: int, default_model: FieldLineModel, slow_integrand: Callable[..., float]
) -> None:
    """Reference (scipy.integrate.quad over latitude, formula written anew): better than 1e-9.

    Random L 1.25-7, alpha 0-4, foF2 0-12 MHz, hmF2 250-400 km, scale height 40-80 km, frequency to
    0.9 of the equatorial gyrofrequency, density 0.03 to 3 times the saturated one.
    """
    l_value, density_m3, share, model = random_case(np.random.default_rng(seed), default_model)
    frequency_hz = max(300.0, share * maximum_frequency(l_value, model=model))
    apex_m = (l_value - 1) * EARTH_RADIUS_M
    heights = [h * 1e3 for h in (100, 150, 200, 250, 300, 350, 400, 500, 700, 1000, 1500, 3000)]
    corners = [
        math.acos(math.sqrt((1 + h / EARTH_RADIUS_M) / l_value)) for h in heights if h < apex_m
    ]
    corners = [*corners, 0.0]
    expected = 2 * sum(
        quad(
            slow_integrand,
            low,
            high,
            args=(frequency_hz, l_value, density_m3, model),
            epsabs=1e-13,
            epsrel=1e-12,
            limit=400,
        )[0]
        for high, low in itertools.pairwise(corners)
    )
    found = travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )
    assert found[0] == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("seed", range(24))
@pytest.mark.parametrize("plain", [False, True])
def test_jacobian_against_central_differences(
    seed: int, plain: bool, default_model: FieldLineModel
) -> None:
    """Identity: analytic derivatives equal central differences of the time, 24 random points.

    Step 1e-5: rounding gives 1e-11 of the time, truncation 1e-10, a change in the number of panels
    inside the step 1e-8. Compared to 1e-7 of the largest derivative in its column.
    """
    l_value, density_m3, share, model = random_case(np.random.default_rng(seed), default_model)
    if plain:
        model = replace(model, ions=None, layer=None, foot_altitude_m=1000e3)
    top_hz = min(share, 0.7) * maximum_frequency(l_value, model=model)
    frequency_hz = np.linspace(0.2, 1.0, 7) * top_hz

    def time(dl: float, dn: float, da: float) -> np.ndarray:
        return travel_time(
            frequency_hz,
            l_value=l_value * math.exp(dl),
            equatorial_density_m3=density_m3 * math.exp(dn),
            model=replace(model, density_exponent=model.density_exponent + da),
        )

    step = 1e-5
    numeric = np.stack(
        [(time(*(step * e)) - time(*(-step * e))) / (2 * step) for e in np.eye(3)], axis=1
    )
    found = travel_time_jacobian(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )
    error = np.abs(found.jacobian - numeric) / np.abs(numeric).max(axis=0)
    assert error.max() < 1e-7
    np.testing.assert_allclose(found.time_s, time(0, 0, 0), rtol=1e-14)
