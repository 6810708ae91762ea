"""What holds for the package as a whole: errors, docstrings, frozen data, properties."""

from __future__ import annotations

import dataclasses
import inspect
import pickle

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

import fieldlines
from fieldlines import (
    CentredDipole,
    DomainError,
    FieldLineModel,
    FieldlinesError,
    line_nodes,
    travel_time,
    travel_time_jacobian,
)


def test_error_survives_pickling() -> None:
    """Identity: the error crosses a process boundary with message and attributes."""
    error = DomainError("l_value", 0.5, allowed="1.2 to 8", next_step="choose another")
    again = pickle.loads(pickle.dumps(error))
    assert isinstance(again, FieldlinesError)
    assert isinstance(again, ValueError)
    assert str(again) == str(error)
    assert (again.argument, again.value, again.allowed) == ("l_value", 0.5, "1.2 to 8")
    assert again.next_step == "choose another"


def test_public_names_are_documented() -> None:
    """Identity: each callable in __all__ exists and documents every parameter and its result."""
    for name in fieldlines.__all__:
        thing = getattr(fieldlines, name)
        if not callable(thing):
            continue
        text = inspect.getdoc(thing)
        assert text, name
        if inspect.isclass(thing) and issubclass(thing, Exception):
            continue
        for parameter in inspect.signature(thing).parameters:
            assert parameter in text, (name, parameter)
        if not inspect.isclass(thing):
            assert "Returns\n---" in text, name
    assert list(fieldlines.__all__) == sorted(set(fieldlines.__all__), key=_isort_order)


def _isort_order(name: str) -> tuple[int, str]:
    """Constants first, then classes, then functions, as ruff sorts them."""
    return (0 if name.isupper() else 1 if name[0].isupper() else 2), name


def test_data_are_frozen() -> None:
    """Identity: no public dataclass can be changed after it is made."""
    classes = [getattr(fieldlines, name) for name in fieldlines.__all__]
    classes = [c for c in classes if inspect.isclass(c) and dataclasses.is_dataclass(c)]
    assert len(classes) >= 8
    assert all(c.__dataclass_params__.frozen for c in classes)


def test_nodes_cover_the_line() -> None:
    """Identity: nodes rise from foot to equator, weights are positive, ends are never passed."""
    model = FieldLineModel(CentredDipole.from_date(2025.0))
    for l_value in (1.2, 1.3, 2.0, 3.7, 8.0):
        nodes = line_nodes(l_value, model=model)
        assert np.all(np.diff(nodes.altitude_m) > 0)
        assert np.all(nodes.weight_m > 0)
        assert 100e3 < nodes.altitude_m[0] < nodes.altitude_m[-1] < (l_value - 1) * 6371.2e3


@settings(max_examples=60, deadline=None)
@given(
    l_value=st.floats(1.2, 8.0),
    log_density=st.floats(6.0, 10.5),
    alpha=st.floats(-2.0, 8.0),
    share=st.floats(0.001, 0.99),
)
def test_any_valid_point_gives_a_physical_time(
    l_value: float, log_density: float, alpha: float, share: float
) -> None:
    """Identity: inside the range, times are finite, later than light, and grow with density."""
    model = FieldLineModel(CentredDipole.from_date(2025.0), density_exponent=alpha)
    frequency_hz = share * model.dipole.equatorial_gyrofrequency(l_value)
    result = travel_time_jacobian(
        frequency_hz, l_value=l_value, equatorial_density_m3=10**log_density, model=model
    )
    assert np.all(np.isfinite(result.jacobian))
    assert result.time_s[0] > fieldlines.arc_length(l_value) / 299792458.0
    denser = travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=1.1 * 10**log_density, model=model
    )
    assert denser[0] > result.time_s[0]


@settings(max_examples=40, deadline=None)
@given(l_value=st.floats(1.2, 8.0), log_density=st.floats(-6.0, 10.5))
def test_nose_is_a_number_inside_the_range_or_nan(l_value: float, log_density: float) -> None:
    """Identity: any density gives a nose below the gyrofrequency, or NaN twice; never an error."""
    model = FieldLineModel(CentredDipole.from_date(2025.0), layer=None)
    found = fieldlines.nose(l_value, equatorial_density_m3=10**log_density, model=model)
    top_hz = fieldlines.maximum_frequency(l_value, model=model)
    if np.isnan(found.frequency_hz):
        assert np.isnan(found.time_s)
        assert log_density < 7.0  # a plasma of ten per cubic centimetre always has one
    else:
        assert 0.05 * top_hz < found.frequency_hz < 0.95 * top_hz
        assert found.time_s > 0
