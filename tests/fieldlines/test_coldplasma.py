"""The homogeneous plasma: known extrema, point values, limits and errors."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from fieldlines import (
    DomainError,
    group_index,
    quasi_longitudinal_group_index,
    quasi_longitudinal_refractive_index,
    refractive_index,
)


def minimum(function: object, ratio: float) -> tuple[float, float]:
    """Place (in units of fH) and value of the smallest index at one fp/fH."""
    gyro_hz = 1e5

    def value(share: float) -> float:
        return float(
            function(  # type: ignore[operator]
                share * gyro_hz, plasma_frequency_hz=ratio * gyro_hz, gyrofrequency_hz=gyro_hz
            )
        )

    found = minimize_scalar(value, bounds=(0.05, 0.9), method="bounded", options={"xatol": 1e-10})
    return float(found.x), float(found.fun)


@pytest.mark.parametrize(
    ("ratio", "place", "value"),
    [
        (1.0, 0.239547, 1.80940862),
        (2.0, 0.247158, 3.22095034),
        (3.0, 0.248716, 4.71424573),
        (5.0, 0.249534, 7.75556816),
        (10.0, 0.249883, 15.42485330),
        (100.0, 0.249999, 153.96295851),
    ],
)
def test_group_index_is_smallest_near_a_quarter(ratio: float, place: float, value: float) -> None:
    """Reference (shared table 1a, computed without this code): minimum of n_g against fp/fH.

    Places to the six printed digits, less what a flat minimum allows (2e-6); values to 1e-8.
    """
    found = minimum(group_index, ratio)
    assert found[0] == pytest.approx(place, abs=2e-6)
    assert found[1] == pytest.approx(value, rel=1e-8)


def test_group_index_minimum_tends_to_a_quarter() -> None:
    """Reference (Helliwell 1965, from memory): n_g is least at fH/4, value 8/(3 sqrt 3) fp/fH."""
    place, value = minimum(group_index, 3000.0)
    assert place == pytest.approx(0.25, abs=2e-6)  # the finite ratio moves it by 1e-8
    assert value / 3000.0 == pytest.approx(8 / (3 * np.sqrt(3)), rel=1e-6)
    place, value = minimum(quasi_longitudinal_group_index, 2.0)
    assert place == pytest.approx(0.25, abs=2e-6)
    assert value / 2.0 == pytest.approx(8 / (3 * np.sqrt(3)), rel=1e-12)


@pytest.mark.parametrize("ratio", [0.3, 1.0, 4.0, 50.0])
def test_phase_velocity_is_largest_at_half(ratio: float) -> None:
    """Reference (algebra): for every fp/fH the index is least at fH/2, n^2 = 1 + 4 (fp/fH)^2."""
    place, value = minimum(refractive_index, ratio)
    assert place == pytest.approx(0.5, abs=1e-6)
    assert value == pytest.approx(np.sqrt(1 + 4 * ratio**2), rel=1e-12)


POINT_VALUES = """
2000.0 109170.7104 401538.008 27.44492760 27.42670325 13.99642820 13.96926766 27.05374816 14.18743242
5000.0 109170.7104 401538.008 17.62256806 17.59417247 9.26122012 9.21932999 17.52380600 9.31225137
20000.0 109170.7104 401538.008 9.56069036 9.50824906 5.89309125 5.82042186 9.54923691 5.90012551
3000.0 32346.8771 283930.248 30.27660003 30.26008112 16.70064693 16.67671694 30.19640126 16.74453344
8000.0 13646.3388 179573.256 26.73727623 26.71856920 32.30216198 32.28735121 26.73214897 32.30835283
5000.0 13646.3388 28393.025 4.43255226 4.31827738 3.54547391 3.40772422 4.43057373 3.54705425
"""  # noqa: E501


@pytest.mark.parametrize("row", POINT_VALUES.strip().splitlines())
def test_point_values(row: str) -> None:
    """Reference (shared table 1b): exact, quasi-longitudinal and H+ indices to printed digits."""
    f, fh, fp, *expected = map(float, row.split())
    plasma = {"plasma_frequency_hz": fp, "gyrofrequency_hz": fh}
    found = [
        refractive_index(f, **plasma),
        quasi_longitudinal_refractive_index(f, **plasma),
        group_index(f, **plasma),
        quasi_longitudinal_group_index(f, **plasma),
        refractive_index(f, **plasma, oxygen_fraction=0.0),
        group_index(f, **plasma, oxygen_fraction=0.0),
    ]
    # The lowest plasma frequency is printed to 2e-8 of itself.
    np.testing.assert_allclose(found, expected, rtol=2e-8)


def test_index_without_plasma_is_one() -> None:
    """Identity: with no plasma both indices are 1, whatever the ions."""
    for oxygen_fraction in (None, 0.4):
        for function in (refractive_index, group_index):
            assert (
                function(
                    1e3,
                    plasma_frequency_hz=0.0,
                    gyrofrequency_hz=1e5,
                    oxygen_fraction=oxygen_fraction,
                )
                == 1.0
            )


def test_arguments_broadcast_and_stay_unchanged() -> None:
    """Identity: (3, 1) against (4,) gives (3, 4), each element as by itself; inputs read-only."""
    f = np.array([1e3, 2e3, 3e3, 4e3])
    fp = np.array([[1e5], [2e5], [3e5]])
    for array in (f, fp):
        array.flags.writeable = False
    for function in (refractive_index, group_index):
        table = function(f, plasma_frequency_hz=fp, gyrofrequency_hz=1e4, oxygen_fraction=0.2)
        assert table.shape == (3, 4)
        single = function(3e3, plasma_frequency_hz=2e5, gyrofrequency_hz=1e4, oxygen_fraction=0.2)
        assert table[1, 2] == single


def test_bad_arguments_are_named() -> None:
    """Identity: each message holds argument, value, range and next step."""
    good = {"plasma_frequency_hz": 1e5, "gyrofrequency_hz": 1e4}
    with pytest.raises(DomainError, match=r"frequency_hz=0 .*above 0 Hz.*; drop"):
        group_index([1.0, 0.0], **good)
    with pytest.raises(DomainError, match=r"frequency_hz=12000 .*below the gyrofrequency 10000 Hz"):
        group_index([1e3, 1.2e4], **good)
    with pytest.raises(DomainError, match=r"frequency_hz=10000 "):
        quasi_longitudinal_group_index(1e4, **good)
    with pytest.raises(DomainError, match=r"plasma_frequency_hz=nan"):
        refractive_index(1e3, plasma_frequency_hz=np.nan, gyrofrequency_hz=1e4)
    with pytest.raises(DomainError, match=r"oxygen_fraction=1.5 .*\(0 to 1\)"):
        refractive_index(1e3, **good, oxygen_fraction=1.5)
