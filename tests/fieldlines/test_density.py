"""The ionospheric layer, the ions and the power law."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import gamma

from fieldlines import (
    AMBIENT_LN_DENSITY_SD,
    ChapmanLayer,
    DomainError,
    IonMixture,
    electron_density,
    saturated_density,
)

LAYER = ChapmanLayer(5e6, 300e3, 60e3)


def test_chapman_column_and_plasma_frequency_integrals() -> None:
    """Reference (shared section 6): column 4.1327314 Nm H, int fp dh = 6.5836948 foF2 H.

    Closed forms: sqrt(2 pi e) and sqrt(2) e^(1/4) Gamma(1/4); 1e-7 is the printed precision.
    """
    layer = ChapmanLayer(8e6, 800e3, 40e3)

    def integral(power: float) -> float:
        def value(y: float) -> float:
            return float(layer.density(layer.peak_altitude_m + y * layer.scale_height_m)) ** power

        return quad(value, -6, 0, epsrel=1e-11)[0] + quad(value, 0, 150, epsrel=1e-11)[0]

    column = integral(1.0) / layer.peak_density_m3
    slant = integral(0.5) / np.sqrt(layer.peak_density_m3)
    assert column == pytest.approx(4.1327314, abs=1e-7)
    assert column == pytest.approx(np.sqrt(2 * np.pi * np.e), rel=1e-9)
    assert slant == pytest.approx(6.5836948, abs=1e-7)
    assert slant == pytest.approx(np.sqrt(2) * np.e**0.25 * gamma(0.25), rel=1e-9)


def test_peak_density_of_the_contract() -> None:
    """Reference (contract): nm = foF2^2 / 80.616, five digits."""
    assert LAYER.peak_density_m3 == pytest.approx(25e12 / 80.616, rel=1e-5)
    assert LAYER.density(300e3) == LAYER.peak_density_m3
    assert LAYER.density(0.0) < 1e-15  # five scale heights below the peak: exp(-74) of it
    assert ChapmanLayer(0.0, 300e3, 60e3).density(300e3) == 0.0


def test_layer_slope_is_the_derivative() -> None:
    """Identity: density_slope against a central difference over 2 m (truncation 1e-9)."""
    altitude_m = np.linspace(150e3, 1200e3, 40)
    numeric = (LAYER.density(altitude_m + 1.0) - LAYER.density(altitude_m - 1.0)) / 2.0
    np.testing.assert_allclose(
        LAYER.density_slope(altitude_m),
        numeric,
        rtol=1e-6,
        atol=1e-9 * LAYER.peak_density_m3 / LAYER.scale_height_m,
    )


def test_oxygen_fraction_of_the_contract() -> None:
    """Reference (contract): O+ fraction = 1 / (1 + exp((h - 700 km)/120 km))."""
    altitude_m = np.array([100e3, 580e3, 700e3, 900e3, 2000e3])
    expected = 1 / (1 + np.exp((altitude_m - 700e3) / 120e3))
    np.testing.assert_allclose(IonMixture().oxygen_fraction(altitude_m), expected, atol=1e-15)
    assert IonMixture(transition_altitude_m=-1e9).oxygen_fraction(1e6) == 0.0


def test_power_law_of_the_contract() -> None:
    """Reference (contract): neq (L RE / r)^alpha plus the layer."""
    altitude_m = np.array([300e3, 1000e3, 3 * 6371.2e3])
    expected = 1e9 * (4 * 6371.2e3 / (6371.2e3 + altitude_m)) ** 1.5
    parts = {"l_value": 4.0, "equatorial_density_m3": 1e9, "density_exponent": 1.5}
    np.testing.assert_allclose(electron_density(altitude_m, **parts), expected, rtol=1e-14)
    with_layer = electron_density(altitude_m, **parts, layer=LAYER)
    np.testing.assert_allclose(with_layer - expected, LAYER.density(altitude_m), atol=1.0)


@pytest.mark.parametrize(
    ("l_value", "density_cm3"), [(2.0, 1884.95), (3.0, 913.69), (4.0, 442.89), (6.0, 104.06)]
)
def test_saturated_density(l_value: float, density_cm3: float) -> None:
    """Reference (Carpenter and Anderson 1992, shared table 5): base formula, printed digits."""
    assert saturated_density(l_value) / 1e6 == pytest.approx(density_cm3, abs=0.006)


def test_ambient_spread_covers_published_disagreement() -> None:
    """Reference (shared table 5): other climatologies at L = 3 lie within 1.5 ambient sigma.

    Sheeley 2001: 1390, Ozhogin 2012: 996, Denton 2004: 608 per cm^3.
    """
    offsets = np.log(np.array([1390, 996, 608]) * 1e6 / saturated_density(3.0))
    assert np.all(np.abs(offsets) < 1.5 * AMBIENT_LN_DENSITY_SD)
    assert np.abs(offsets).max() > 0.4 * AMBIENT_LN_DENSITY_SD


def test_bad_layers_are_named() -> None:
    """Identity: a layer given in MHz or km is refused with the way out."""
    with pytest.raises(DomainError, match=r"peak_altitude_m=300 .*\(100000 to 800000 m\)"):
        ChapmanLayer(5e6, 300.0, 60e3)
    with pytest.raises(DomainError, match=r"critical_frequency_hz=nan .*layer=None"):
        ChapmanLayer(float("nan"), 300e3, 60e3)
    with pytest.raises(DomainError, match=r"transition_width_m=0 "):
        IonMixture(transition_width_m=0.0)
    with pytest.raises(DomainError, match=r"l_value=9 .*\(1.2 to 8\)"):
        saturated_density([3.0, 9.0])
