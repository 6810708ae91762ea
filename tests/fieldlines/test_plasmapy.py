"""The index against plasmapy 2025, an independent implementation (slow to import: kept here)."""

from __future__ import annotations

import warnings

import numpy as np
import pytest

from fieldlines import group_index, refractive_index
from fieldlines.constants import (
    ELECTRON_OXYGEN_MASS_RATIO,
    ELECTRON_PROTON_MASS_RATIO,
    GYRO_HZ_PER_T,
    PLASMA_HZ2_M3,
)

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # plasmapy's own import-time notices are not ours to fix
    import astropy.units as u
    from plasmapy.formulary import cold_plasma_permittivity_LRP
    from plasmapy.particles import Particle

CASES = [
    # density per m^3, field in T, frequency in Hz: equator to the foot of the path
    (2e9, 3900e-9, 2000.0),
    (2e9, 3900e-9, 20000.0),
    (1e9, 1155.6e-9, 3000.0),
    (4e8, 487.5e-9, 5000.0),
    (1e7, 487.5e-9, 5000.0),
    (3e11, 45000e-9, 700.0),
]


def plasmapy_index(
    frequency_hz: float, *, density_m3: float, field_t: float, shares: dict[str, float]
) -> float:
    """Square root of plasmapy's R for electrons and the given ions."""
    species = ["e-", *shares]
    densities = [density_m3, *(share * density_m3 for share in shares.values())]
    result = cold_plasma_permittivity_LRP(
        B=field_t * u.T,
        species=species,
        n=densities * u.m**-3,
        omega=2 * np.pi * frequency_hz * u.rad / u.s,
    )
    return float(np.sqrt(result.right.value))


SHARES = [({}, None), ({"p+": 1.0}, 0.0), ({"p+": 0.7, "O+": 0.3}, 0.3), ({"O+": 1.0}, 1.0)]


@pytest.mark.parametrize(("density_m3", "field_t", "frequency_hz"), CASES)
@pytest.mark.parametrize(("shares", "oxygen_fraction"), SHARES)
def test_indices_agree_with_plasmapy(
    density_m3: float,
    field_t: float,
    frequency_hz: float,
    shares: dict[str, float],
    oxygen_fraction: float | None,
) -> None:
    """Reference (plasmapy 2025, cold_plasma_permittivity_LRP): phase index, and group by slope.

    1e-11 leaves room for the last digits of the constants and masses. The central difference over
    1e-4 f has a truncation error near 1e-8 of the index.
    """
    kwargs = {"density_m3": density_m3, "field_t": field_t, "shares": shares}
    plasma = {
        "plasma_frequency_hz": np.sqrt(PLASMA_HZ2_M3 * density_m3),
        "gyrofrequency_hz": GYRO_HZ_PER_T * field_t,
        "oxygen_fraction": oxygen_fraction,
    }
    expected = plasmapy_index(frequency_hz, **kwargs)
    assert refractive_index(frequency_hz, **plasma) == pytest.approx(expected, rel=1e-11)

    step = 1e-4
    upper, lower = (
        factor * frequency_hz * plasmapy_index(factor * frequency_hz, **kwargs)
        for factor in (1 + step, 1 - step)
    )
    slope = (upper - lower) / (2 * step * frequency_hz)
    assert group_index(frequency_hz, **plasma) == pytest.approx(slope, rel=3e-8)


def test_ion_masses_agree_with_plasmapy() -> None:
    """Reference (plasmapy 2025, particle masses): mass ratios to the rounding of 15.999 u."""
    electron = Particle("e-").mass
    assert pytest.approx(float(electron / Particle("p+").mass), rel=1e-10) == (
        ELECTRON_PROTON_MASS_RATIO
    )
    assert pytest.approx(float(electron / Particle("O+").mass), rel=1e-6) == (
        ELECTRON_OXYGEN_MASS_RATIO
    )
