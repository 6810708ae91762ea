"""Nose, zero-frequency dispersion and tube content against closed forms and tables."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy import constants as codata
from scipy.optimize import minimize_scalar
from scipy.special import hyp2f1

from fieldlines import (
    ChapmanLayer,
    DomainError,
    FieldLineModel,
    IonMixture,
    arc_length,
    footpoint_latitude,
    line_nodes,
    nose,
    quasi_longitudinal_travel_time,
    travel_time,
    tube_content,
    zero_frequency_dispersion,
)

EARTH_RADIUS_M = 6371.2e3
GRID = [(2.0, 2000.0), (2.5, 1500.0), (3.0, 1000.0), (4.0, 400.0), (5.0, 200.0)]


def plasma_frequency_hz(density_m3: float) -> float:
    """Textbook plasma frequency, Hz."""
    return float(np.sqrt(density_m3 * codata.e**2 / (codata.epsilon_0 * codata.m_e)) / (2 * np.pi))


# Shared table 3b: L, neq, alpha, D0, exact nose frequency and time, from 1000 km, 31 200 nT.
REFERENCE = """
2.0 2000 0 28.8328063 36794.68 0.23335341
2.0 2000 1 30.9819081 37646.12 0.24609997
2.0 2000 4 39.8056210 40613.16 0.29857411
2.5 1500 1 51.1320484 20102.52 0.54262408
2.5 1500 3 63.2218129 21485.61 0.63952340
3.0 1000 0 61.9714137 11474.27 0.86888352
3.0 1000 1 68.6485591 11863.43 0.93931327
3.0 1000 2 77.1093415 12314.28 1.02723667
4.0 400 1 92.5656977 5092.56 1.91865071
4.0 400 4 150.3243479 5947.30 2.78543745
5.0 200 0 102.8301236 2523.10 3.04427188
5.0 200 1 116.2371380 2627.60 3.34238240
5.0 200 4 199.9626691 3128.62 5.06296958
"""


@pytest.mark.parametrize("row", REFERENCE.strip().splitlines())
def test_nose_and_dispersion_table(row: str, table_model: FieldLineModel) -> None:
    """Reference (shared table 3b): D0, nose frequency and nose time to the printed digits."""
    l_value, density_cm3, alpha, d0, frequency_hz, time_s = map(float, row.split())
    parts = {
        "equatorial_density_m3": density_cm3 * 1e6,
        "model": replace(table_model, density_exponent=alpha),
    }
    assert zero_frequency_dispersion(l_value, **parts) == pytest.approx(d0, abs=6e-8)
    found = nose(l_value, **parts)
    assert found.frequency_hz == pytest.approx(frequency_hz, abs=6e-3)
    assert found.time_s == pytest.approx(time_s, abs=6e-9)


def test_quasi_longitudinal_nose_ratio(table_model: FieldLineModel) -> None:
    """Reference (shared table 3d): fn/fHeq is a pure number of L and alpha, whatever the density.

    0.368330 at L = 3, alpha = 1; a bounded search finds a minimum to about 1e-8 of its place.
    """
    top_hz = table_model.dipole.equatorial_gyrofrequency(3.0)
    for density_m3 in (1e8, 1e9):
        found = minimize_scalar(
            lambda share, density_m3=density_m3: quasi_longitudinal_travel_time(
                share * top_hz, l_value=3.0, equatorial_density_m3=density_m3, model=table_model
            )[0],
            bounds=(0.1, 0.8),
            method="bounded",
            options={"xatol": 1e-9},
        )
        assert found.x == pytest.approx(0.368330, abs=1e-6)


def test_nose_is_a_minimum_of_the_default_model(default_model: FieldLineModel) -> None:
    """Identity: the slope changes sign at the nose, within 1e-5 of its frequency."""
    parts = {"equatorial_density_m3": 4e8, "model": default_model}
    found = nose(4.0, **parts)
    around = found.frequency_hz * np.array([0.9, 1 - 1e-5, 1 + 1e-5, 1.1])
    later = travel_time(around, l_value=4.0, **parts) - found.time_s
    assert np.all(later > 0)
    # A parabola rises by the square of the offset: equal heights mean a centred minimum.
    assert later[1] == pytest.approx(later[2], rel=0.05)


def test_nose_outside_validity_is_nan(default_model: FieldLineModel) -> None:
    """Identity: with next to no plasma the least time lies at the edge: NaN, not a number."""
    model = replace(default_model, layer=None, ions=None)
    found = nose(3.0, equatorial_density_m3=1.0, model=model)
    assert np.isnan(found.frequency_hz)
    assert np.isnan(found.time_s)


@pytest.mark.parametrize(("l_value", "density_cm3"), GRID)
def test_dispersion_for_density_proportional_to_field(
    l_value: float, density_cm3: float, table_model: FieldLineModel
) -> None:
    """Reference (closed form): n ~ B gives D0 = fpeq S / (2 c sqrt(fHeq)), S the arc length.

    The nodes of the path carry a density of the test's own; 1e-12 is rounding.
    """
    nodes = line_nodes(l_value, model=table_model)
    equatorial_hz = table_model.dipole.equatorial_gyrofrequency(l_value)
    density_m3 = density_cm3 * 1e6 * nodes.gyrofrequency_hz / equatorial_hz
    plasma_hz = np.sqrt(density_m3 * codata.e**2 / (codata.epsilon_0 * codata.m_e)) / (2 * np.pi)
    found = np.sum(nodes.weight_m * plasma_hz / np.sqrt(nodes.gyrofrequency_hz)) / (2 * codata.c)
    length_m = arc_length(l_value, altitude_m=1000e3)
    closed = plasma_frequency_hz(density_cm3 * 1e6) * length_m / (2 * codata.c)
    assert found == pytest.approx(closed / np.sqrt(equatorial_hz), rel=1e-12)
    tabled = {2.0: 39.648832690, 2.5: 70.188283496, 3.0: 98.850874828}  # shared table 3a
    if l_value in tabled:
        assert found == pytest.approx(tabled[l_value], rel=1e-10)


@pytest.mark.parametrize(("l_value", "density_cm3"), GRID)
def test_dispersion_for_inverse_cube(
    l_value: float, density_cm3: float, table_model: FieldLineModel
) -> None:
    """Reference (closed form): alpha = 3 gives x0 2F1(-1/4, 1/2; 3/2; -3 x0^2); 1e-12."""
    x = np.sin(footpoint_latitude(l_value, altitude_m=1000e3))
    equatorial_hz = table_model.dipole.equatorial_gyrofrequency(l_value)
    scale = l_value * EARTH_RADIUS_M * plasma_frequency_hz(density_cm3 * 1e6) / codata.c
    closed = scale / np.sqrt(equatorial_hz) * x * hyp2f1(-0.25, 0.5, 1.5, -3 * x**2)
    found = zero_frequency_dispersion(
        l_value,
        equatorial_density_m3=density_cm3 * 1e6,
        model=replace(table_model, density_exponent=3.0),
    )
    assert found == pytest.approx(closed, rel=1e-12)


def test_dispersion_is_the_low_frequency_limit(table_model: FieldLineModel) -> None:
    """Identity: quasi-longitudinal t sqrt(f) tends to D0, first order in f/fHeq (1e-5 of it)."""
    parts = {"equatorial_density_m3": 1e9, "model": table_model}
    top_hz = table_model.dipole.equatorial_gyrofrequency(3.0)
    frequency_hz = 1e-5 * top_hz
    limit = quasi_longitudinal_travel_time(frequency_hz, l_value=3.0, **parts)[0]
    d0 = zero_frequency_dispersion(3.0, **parts)
    # Slope 0.847 per f/fHeq (shared table 3f, alpha = 1, L = 3).
    assert limit * np.sqrt(frequency_hz) / d0 - 1 == pytest.approx(0.84698e-5, rel=1e-3)


IONOSPHERE = """
2 350 50 1.1590 1.0351 0.9912
3 320 50 1.7327 1.5488 1.4835
4 300 55 2.5168 2.2504 2.1557
6 300 60 4.0833 3.6504 3.4965
8 300 65 5.8398 5.2196 4.9992
12 350 75 9.8550 8.7941 8.4187
"""


@pytest.mark.parametrize("row", IONOSPHERE.strip().splitlines())
def test_dispersion_of_the_ionosphere(row: str, table_model: FieldLineModel) -> None:
    """Reference (shared table 6b): one crossing, 100 to 1000 km, at L = 2, 3, 4; four decimals."""
    critical_mhz, peak_km, scale_km, *expected = map(float, row.split())
    layer = ChapmanLayer(critical_mhz * 1e6, peak_km * 1e3, scale_km * 1e3)
    model = replace(table_model, layer=layer)
    for l_value, d in zip((2.0, 3.0, 4.0), expected, strict=True):
        # So thin a power law (1e-12 per m^3) adds less than 1e-9 of its own.
        whole, above = (
            zero_frequency_dispersion(
                l_value,
                equatorial_density_m3=1e-12,
                model=replace(model, foot_altitude_m=foot_m),
            )
            for foot_m in (100e3, 1000e3)
        )
        assert (whole - above) / 2 == pytest.approx(d, abs=6e-5)


CONTENT = """
2 2000.0 8.674253e+12 9.704977e+12 1.105516e+13 1.286242e+13 1.533386e+13
2.5 1500.0 1.752580e+13 1.997510e+13 2.344009e+13 2.855318e+13 3.642720e+13
3 1000.0 2.549878e+13 2.932757e+13 3.502194e+13 4.404071e+13 5.928769e+13
4 400.0 3.400967e+13 3.942444e+13 4.796589e+13 6.285829e+13 9.183310e+13
5 200.0 4.270658e+13 4.965508e+13 6.097159e+13 8.197342e+13 1.272878e+14
4 5.0 4.251209e+11 4.928056e+11 5.995736e+11 7.857287e+11 1.147914e+12
"""


@pytest.mark.parametrize("row", CONTENT.strip().splitlines())
@pytest.mark.parametrize("foot_altitude_m", [100e3, 1000e3])
def test_tube_content(row: str, foot_altitude_m: float, table_model: FieldLineModel) -> None:
    """Reference (shared table 7, per cm^2): alpha 0 to 4, seven digits; and I_0..I_4 to 1e-12.

    The content above 1000 km does not depend on where the path ends.
    """
    l_value, density_cm3, *expected = map(float, row.split())
    x = np.sin(footpoint_latitude(l_value, altitude_m=1000e3))
    polynomials: list[Callable[[float], float]] = [
        lambda x: x - x**3 + 3 * x**5 / 5 - x**7 / 7,
        lambda x: x - 2 * x**3 / 3 + x**5 / 5,
        lambda x: x - x**3 / 3,
        lambda x: x,
        np.arctanh,
    ]
    field_ratio = np.sqrt(1 + 3 * x**2) / (1 - x**2) ** 3
    for alpha, (tabled, integral) in enumerate(zip(expected, polynomials, strict=True)):
        found = tube_content(
            l_value,
            equatorial_density_m3=density_cm3 * 1e6,
            model=replace(
                table_model, density_exponent=float(alpha), foot_altitude_m=foot_altitude_m
            ),
        )
        assert found == pytest.approx(tabled * 1e4, rel=6e-7)
        closed = density_cm3 * 1e6 * field_ratio * l_value * EARTH_RADIUS_M * integral(x)
        assert found == pytest.approx(closed, rel=1e-12)


def test_layer_adds_its_column_to_the_content(default_model: FieldLineModel) -> None:
    """Reference (Chapman column 4.1327314 Nm H): from 100 km the layer adds its slanted column.

    Within 2 %: the field falls and the line bends over the layer's thickness.
    """
    base_m = 100e3
    layer = ChapmanLayer(5e6, 300e3, 60e3)
    with_layer, without = (
        tube_content(
            4.0,
            equatorial_density_m3=4e8,
            model=replace(default_model, layer=choice),
            base_altitude_m=base_m,
        )
        for choice in (layer, None)
    )
    vertical = 4.1327314 * layer.peak_density_m3 * layer.scale_height_m
    x = np.sin(footpoint_latitude(4.0, altitude_m=350e3))
    slant = np.sqrt(1 + 3 * x**2) / (2 * x)  # ds/dr on a dipole line
    # The section at 350 km against that at the base: area goes as 1/B, about r^3.
    widening = ((EARTH_RADIUS_M + 350e3) / (EARTH_RADIUS_M + base_m)) ** 3
    assert with_layer - without == pytest.approx(vertical * slant * widening, rel=0.02)


def test_ions_do_not_change_what_they_should_not(table_model: FieldLineModel) -> None:
    """Identity: D0 and tube content count electrons, so the ion make-up does not enter."""
    with_ions = replace(table_model, ions=IonMixture())
    for function in (zero_frequency_dispersion, tube_content):
        bare = function(3.0, equatorial_density_m3=1e9, model=table_model)
        assert function(3.0, equatorial_density_m3=1e9, model=with_ions) == bare


@pytest.mark.parametrize("function", [nose, zero_frequency_dispersion, tube_content])
def test_bad_arguments_are_named(
    function: Callable[..., object], default_model: FieldLineModel
) -> None:
    """Identity: L and density outside their range are named."""
    with pytest.raises(DomainError, match=r"l_value=0.9 .*\(1.2 to 8\)"):
        function(0.9, equatorial_density_m3=1e9, model=default_model)
    with pytest.raises(DomainError, match=r"equatorial_density_m3=-1 "):
        function(3.0, equatorial_density_m3=-1.0, model=default_model)


def test_bad_base_is_named(default_model: FieldLineModel) -> None:
    """Identity: a base given in kilometres passes for metres, one too high is refused."""
    with pytest.raises(DomainError, match=r"altitude_m=3000000 "):
        tube_content(3.0, equatorial_density_m3=1e9, model=default_model, base_altitude_m=3e6)
