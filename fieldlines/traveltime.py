"""Travel time of one hop along a field line, and its derivatives.

t(f) = (1/c) int n_g ds with n_g = (1 + P a) / sqrt(1 + P b), P the squared plasma frequency and
a, b of :mod:`fieldlines.coldplasma`. Arrays over the path have the node on axis 0 and the
frequency on axis 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fieldlines.coldplasma import index_term_changes, index_terms
from fieldlines.constants import PLASMA_HZ2_M3, SPEED_OF_LIGHT_M_S
from fieldlines.errors import DomainError, FloatArray, require_within
from fieldlines.line import FieldLineModel, LineNodes, line_node_changes, line_nodes


@dataclass(frozen=True)
class TravelTime:
    """Travel times of one hop with their derivatives.

    Parameters
    ----------
    frequency_hz : ndarray, shape (n,)
        Frequency, Hz.
    time_s : ndarray, shape (n,)
        Travel time from foot to foot, s.
    jacobian : ndarray, shape (n, 3)
        Derivatives of the time with respect to ln L, ln neq and alpha, s.
    layer_change_s : ndarray, shape (n,)
        Derivative with respect to the logarithm of the layer's critical frequency, s.
    """

    frequency_hz: FloatArray
    time_s: FloatArray
    jacobian: FloatArray
    layer_change_s: FloatArray


def maximum_frequency(l_value: float, *, model: FieldLineModel) -> float:
    """Return the smallest electron gyrofrequency on a path, Hz: the equatorial one.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    model : FieldLineModel
        The model.

    Returns
    -------
    float
        Frequency below which the travel time is finite, Hz.

    Raises
    ------
    DomainError
        If L is outside its range.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole(3.12e-5, "round textbook value"))
    >>> f"{maximum_frequency(3.0, model=model):.1f} Hz"
    '32346.9 Hz'
    """
    return model.dipole.equatorial_gyrofrequency(l_value)


def travel_time(
    frequency_hz: npt.ArrayLike,
    *,
    l_value: float,
    equatorial_density_m3: npt.ArrayLike,
    model: FieldLineModel,
) -> FloatArray:
    r"""Return the travel time of one hop from foot to foot, s.

    Parameters
    ----------
    frequency_hz : array_like, shape (n,)
        Frequency, Hz, above 0 and below the equatorial gyrofrequency.
    l_value : float
        McIlwain L, 1.2 to 8.
    equatorial_density_m3 : float or array_like, shape (m,)
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        Everything else.

    Returns
    -------
    ndarray, shape (n,) or (m, n)
        Travel time, s; one row for each density when an array of densities is given.

    Raises
    ------
    DomainError
        If L, a density or a frequency is outside its range.

    Notes
    -----
    .. math:: t(f) = \frac1c \int n_g \, ds

    with the exact cold-plasma group index (:func:`fieldlines.group_index`). The quadrature error is
    below 1e-10 of the time up to 0.98 of the equatorial gyrofrequency, 1e-9 at 0.99 and 1e-5 at
    0.999, where the integrand turns singular.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> time_s = travel_time([2000.0, 5000.0], l_value=3.0, equatorial_density_m3=9e8, model=model)
    >>> [f"{value:.3f}" for value in time_s]
    ['1.754', '1.203']
    """
    nodes = line_nodes(l_value, model=model)
    frequency = _checked_frequency(frequency_hz, l_value=l_value, model=model)
    density_m3 = _checked_density(equatorial_density_m3, most_dimensions=1)
    group, phase = _path_terms(frequency, nodes=nodes, model=model)
    unit_power, layer_part = _plasma_parts(nodes, model)
    weight = nodes.weight_m[:, np.newaxis] / SPEED_OF_LIGHT_M_S
    time_s = np.empty((density_m3.size, frequency.size))
    numerator, denominator = np.empty_like(group), np.empty_like(group)
    for row, density in zip(time_s, density_m3.flat, strict=True):
        plasma = density * unit_power + layer_part
        np.multiply(phase, plasma, out=denominator)
        denominator += 1.0
        np.sqrt(denominator, out=denominator)
        np.multiply(group, weight * plasma, out=numerator)
        numerator += weight
        numerator /= denominator
        np.add.reduce(numerator, axis=0, out=row)
    return time_s if density_m3.ndim else time_s[0]


def travel_time_jacobian(
    frequency_hz: npt.ArrayLike,
    *,
    l_value: float,
    equatorial_density_m3: float,
    model: FieldLineModel,
) -> TravelTime:
    r"""Return travel times with their derivatives with respect to ln L, ln neq and alpha.

    Parameters
    ----------
    frequency_hz : array_like, shape (n,)
        Frequency, Hz, above 0 and below the equatorial gyrofrequency.
    l_value : float
        McIlwain L, 1.2 to 8.
    equatorial_density_m3 : float
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        Everything else; its density exponent is the alpha.

    Returns
    -------
    TravelTime
        Times, s, and Jacobian, s, shape (n, 3).

    Raises
    ------
    DomainError
        If L, the density or a frequency is outside its range.

    Notes
    -----
    Analytic derivatives of the quadrature sum. The layer does not scale with the density; the
    derivative in ln L counts the motion of the nodes, with both feet kept at their altitude.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> result = travel_time_jacobian(
    ...     [2000.0, 5000.0], l_value=3.0, equatorial_density_m3=9e8, model=model
    ... )
    >>> result.jacobian.shape
    (2, 3)
    """
    nodes = line_nodes(l_value, model=model)
    frequency = _checked_frequency(frequency_hz, l_value=l_value, model=model)
    density_m3 = float(_checked_density(equatorial_density_m3))
    group, phase = _path_terms(frequency, nodes=nodes, model=model)
    unit_power, layer_part = _plasma_parts(nodes, model)
    power = density_m3 * unit_power
    plasma = power + layer_part
    weight = nodes.weight_m[:, np.newaxis] / SPEED_OF_LIGHT_M_S

    inverse_index = 1.0 / np.sqrt(1.0 + plasma * phase)
    group_index = (1.0 + plasma * group) * inverse_index
    # d n_g = [d(P a) - half_ratio d(P b)] / n, half_ratio = n_g / (2 n).
    half_ratio = 0.5 * group_index * inverse_index
    by_plasma = (group - half_ratio * phase) * inverse_index
    group_change, phase_change, plasma_change, weight_change = _length_changes(
        frequency, nodes=nodes, model=model, power=power
    )
    by_length = weight_change * group_index
    phase_change *= half_ratio
    group_change -= phase_change
    group_change *= inverse_index
    by_length += weight * (plasma_change * by_plasma + plasma * group_change)

    scaled = (weight * power) * by_plasma
    log_distance = -np.log1p(-np.square(nodes.sin_latitude))[:, np.newaxis]
    jacobian = np.stack(
        [by_length.sum(axis=0), scaled.sum(axis=0), (log_distance * scaled).sum(axis=0)], axis=1
    )
    # The layer's density goes as the square of its critical frequency.
    by_layer = (2.0 * weight * layer_part * by_plasma).sum(axis=0)
    return TravelTime(frequency, (weight * group_index).sum(axis=0), jacobian, by_layer)


def quasi_longitudinal_travel_time(
    frequency_hz: npt.ArrayLike,
    *,
    l_value: float,
    equatorial_density_m3: float,
    model: FieldLineModel,
) -> FloatArray:
    r"""Return the travel time of one hop in the quasi-longitudinal approximation, s.

    Parameters
    ----------
    frequency_hz : array_like, shape (n,)
        Frequency, Hz, above 0 and below the equatorial gyrofrequency.
    l_value : float
        McIlwain L, 1.2 to 8.
    equatorial_density_m3 : float
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        Everything else; the ions are left out whatever it says.

    Returns
    -------
    ndarray, shape (n,)
        Travel time, s, over the same nodes as the exact one.

    Raises
    ------
    DomainError
        If L, the density or a frequency is outside its range.

    Notes
    -----
    .. math:: t(f) = \frac{1}{2c} \int \frac{f_p f_H}{f^{1/2} (f_H - f)^{3/2}} \, ds

    For comparison only: it lacks the ions (5 to 50 ms at 1 to 6 kHz) and the finite ratio of plasma
    to gyrofrequency (2 to 11 ms).

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> time_s = quasi_longitudinal_travel_time(
    ...     [5000.0], l_value=3.0, equatorial_density_m3=9e8, model=model
    ... )
    >>> f"{time_s[0]:.3f}"
    '1.190'
    """
    nodes = line_nodes(l_value, model=model)
    frequency = _checked_frequency(frequency_hz, l_value=l_value, model=model)
    density_m3 = float(_checked_density(equatorial_density_m3))
    unit_power, layer_part = _plasma_parts(nodes, model)
    gyro = nodes.gyrofrequency_hz[:, np.newaxis]
    weight = nodes.weight_m[:, np.newaxis] / (2.0 * SPEED_OF_LIGHT_M_S)
    index = np.sqrt(density_m3 * unit_power + layer_part) * gyro / (gyro - frequency) ** 1.5
    return np.asarray((weight * index).sum(axis=0) / np.sqrt(frequency))


def plasma_frequency_squared(
    nodes: LineNodes, *, equatorial_density_m3: float, model: FieldLineModel
) -> FloatArray:
    """Return the squared electron plasma frequency at the nodes of a line, Hz^2.

    Parameters
    ----------
    nodes : LineNodes
        Nodes from :func:`fieldlines.line_nodes`.
    equatorial_density_m3 : float
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        The model the nodes were made with.

    Returns
    -------
    ndarray, shape (m,)
        Squared plasma frequency, Hz^2.

    Raises
    ------
    DomainError
        If the density is not positive and finite.
    """
    density_m3 = float(_checked_density(equatorial_density_m3))
    unit_power, layer_part = _plasma_parts(nodes, model)
    return np.asarray((density_m3 * unit_power + layer_part)[:, 0])


def _length_changes(
    frequency: FloatArray, *, nodes: LineNodes, model: FieldLineModel, power: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Derivatives in ln L of a, b, P and weight / c."""
    changes = line_node_changes(nodes, model=model)
    altitude_change = changes.altitude_m[:, np.newaxis]
    altitude = nodes.altitude_m[:, np.newaxis]
    oxygen, oxygen_slope = None, np.zeros_like(altitude)
    if model.ions is not None:
        oxygen = model.ions.oxygen_fraction(altitude)
        oxygen_slope = -oxygen * (1.0 - oxygen) / model.ions.transition_width_m
    group_change, phase_change = index_term_changes(
        frequency,
        gyrofrequency_hz=nodes.gyrofrequency_hz[:, np.newaxis],
        oxygen_fraction=oxygen,
        gyrofrequency_change_hz=changes.gyrofrequency_hz[:, np.newaxis],
        oxygen_fraction_change=oxygen_slope * altitude_change,
    )
    x, x_change = nodes.sin_latitude[:, np.newaxis], changes.sin_latitude[:, np.newaxis]
    plasma_change = power * (2.0 * model.density_exponent) * x * x_change / (1.0 - x * x)
    if model.layer is not None:
        plasma_change += PLASMA_HZ2_M3 * model.layer.density_slope(altitude) * altitude_change
    weight_change = changes.weight_m[:, np.newaxis] / SPEED_OF_LIGHT_M_S
    return group_change, phase_change, plasma_change, weight_change


def _path_terms(
    frequency: FloatArray, *, nodes: LineNodes, model: FieldLineModel
) -> tuple[FloatArray, FloatArray]:
    """a and b at each node and frequency, shape (m, n)."""
    altitude = nodes.altitude_m[:, np.newaxis]
    return index_terms(
        frequency,
        gyrofrequency_hz=nodes.gyrofrequency_hz[:, np.newaxis],
        oxygen_fraction=None if model.ions is None else model.ions.oxygen_fraction(altitude),
    )


def _plasma_parts(nodes: LineNodes, model: FieldLineModel) -> tuple[FloatArray, FloatArray]:
    """Squared plasma frequency of the power law per unit density, and of the layer, (m, 1)."""
    cosine_squared = (1.0 - np.square(nodes.sin_latitude))[:, np.newaxis]
    unit_power = PLASMA_HZ2_M3 * cosine_squared**-model.density_exponent
    if model.layer is None:
        return unit_power, np.zeros_like(unit_power)
    return unit_power, PLASMA_HZ2_M3 * model.layer.density(nodes.altitude_m[:, np.newaxis])


def _checked_frequency(
    frequency_hz: npt.ArrayLike, *, l_value: float, model: FieldLineModel
) -> FloatArray:
    """Frequencies as a one-dimensional array inside the model's range."""
    frequency = np.atleast_1d(
        require_within(
            "frequency_hz",
            frequency_hz,
            low=0.0,
            high=maximum_frequency(l_value, model=model),
            open_low=True,
            open_high=True,
            unit=f"Hz, the smallest gyrofrequency of the path at L = {l_value:g}",
            next_step="drop this frequency or lower the band limit",
        )
    )
    _require_dimensions("frequency_hz", frequency, most=1)
    return frequency


def _checked_density(
    equatorial_density_m3: npt.ArrayLike, *, most_dimensions: int = 0
) -> FloatArray:
    """Densities as an array of at most one dimension, positive and finite."""
    density_m3 = require_within(
        "equatorial_density_m3",
        equatorial_density_m3,
        low=0.0,
        high=np.inf,
        open_low=True,
        unit="m^-3",
        next_step="give a positive density (1 cm^-3 is 1e6 m^-3)",
    )
    _require_dimensions("equatorial_density_m3", density_m3, most=most_dimensions)
    return density_m3


def _require_dimensions(argument: str, array: FloatArray, *, most: int) -> None:
    """Refuse an array of more dimensions than the function can return."""
    if array.ndim > most:
        raise DomainError(
            argument,
            f"array of shape {array.shape}",
            allowed=f"{most} dimension at most" if most else "one number",
            next_step="call once for each value, or flatten the array",
        )
