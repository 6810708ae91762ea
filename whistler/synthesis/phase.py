"""The phase of a whistler on one path, from the refractive index along it.

The wave leaves the foot of the path as exp(2 pi i f t) and arrives as

    exp(2 pi i f t - i phi(f)),   phi(f) = (2 pi f / c) * integral of n(f, s) ds,

which is delayed by the group delay (1 / 2 pi) d phi / d f (Helliwell 1965, Whistlers and Related
Ionospheric Phenomena, chapter 3; sign as in numpy's inverse transform).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.integrate import simpson
from scipy.interpolate import CubicSpline

from fieldlines.coldplasma import refractive_index
from fieldlines.constants import (
    EARTH_RADIUS_M,
    GYRO_HZ_PER_T,
    PLASMA_HZ2_M3,
    SPEED_OF_LIGHT_M_S,
)
from fieldlines.density import electron_density
from fieldlines.errors import FloatArray
from fieldlines.line import FieldLineModel

#: Altitude below which the path is sampled evenly in altitude, m: layers and ions change there.
FOOT_REGION_TOP_M = 2000e3
#: Simpson nodes in each foot region (every 0.95 km) and between them (half a line).
FOOT_NODES = 2001
SPACE_NODES = 1501
#: Knots of the spline in ln f; at 400 its error is below 1e-9 of the phase.
FREQUENCY_KNOTS = 400


@dataclass(frozen=True)
class PathPhase:
    """Cycles of phase on one crossing of a path, against frequency.

    Parameters
    ----------
    low_hz, high_hz : float
        Range in which it may be used.
    spline : CubicSpline
        f times the phase delay, cycles, against ln f.
    """

    low_hz: float
    high_hz: float
    spline: CubicSpline

    def cycles(self, frequency_hz: FloatArray) -> FloatArray:
        """Return phi / 2 pi, cycles, at frequencies (n,) within the range."""
        return np.asarray(self.spline(np.log(frequency_hz)))

    def group_delay(self, frequency_hz: FloatArray) -> FloatArray:
        """Return the derivative of the phase, s, at frequencies (n,) within the range."""
        return np.asarray(self.spline(np.log(frequency_hz), 1)) / frequency_hz


@dataclass(frozen=True)
class PathNodes:
    """Half a field line as Simpson nodes: two stretches, foot first.

    Parameters
    ----------
    altitude_m : tuple of ndarray
        Altitude of the nodes of each stretch, m.
    field_t : tuple of ndarray
        Field strength there, T.
    coordinate, arc_per_coordinate_m : tuple of ndarray
        Even integration variable of each stretch and ds over its step, m.
    """

    altitude_m: tuple[FloatArray, ...]
    field_t: tuple[FloatArray, ...]
    coordinate: tuple[FloatArray, ...]
    arc_per_coordinate_m: tuple[FloatArray, ...]


def path_nodes(l_value: float, *, model: FieldLineModel) -> PathNodes:
    r"""Return half a dipole field line cut into Simpson nodes.

    Parameters
    ----------
    l_value : float
        L of the line.
    model : FieldLineModel
        Field and foot altitude.

    Returns
    -------
    PathNodes
        The foot region, even in altitude, and the rest, even in magnetic latitude.

    Notes
    -----
    On :math:`r = L R_E \cos^2\lambda`, with :math:`q = \sqrt{1 + 3\sin^2\lambda}`,

    .. math:: ds = L R_E \cos\lambda\, q\, d\lambda = \frac{q}{2 \sin\lambda}\, dr,
              \qquad B = B_0 q / (L \cos^2\lambda)^3
    """
    apex_m = l_value * EARTH_RADIUS_M
    top_m = min(FOOT_REGION_TOP_M, 0.5 * (apex_m - EARTH_RADIUS_M))
    altitude = np.linspace(model.foot_altitude_m, top_m, FOOT_NODES)
    cosine_sq = (EARTH_RADIUS_M + altitude) / apex_m
    sine = np.sqrt(1.0 - cosine_sq)
    q_foot = np.sqrt(1.0 + 3.0 * sine**2)
    latitude = np.linspace(0.0, np.arcsin(sine[-1]), SPACE_NODES)
    cosine = np.cos(latitude)
    q_space = np.sqrt(1.0 + 3.0 * np.sin(latitude) ** 2)
    surface_t = model.dipole.surface_field_t
    return PathNodes(
        altitude_m=(altitude, apex_m * cosine**2 - EARTH_RADIUS_M),
        field_t=tuple(
            surface_t * q / (l_value * c_sq) ** 3
            for q, c_sq in ((q_foot, cosine_sq), (q_space, cosine**2))
        ),
        coordinate=(altitude, latitude),
        arc_per_coordinate_m=(q_foot / (2.0 * sine), apex_m * cosine * q_space),
    )


@lru_cache(maxsize=64)
def path_phase(
    l_value: float,
    *,
    equatorial_density_m3: float,
    model: FieldLineModel,
    low_hz: float,
    high_hz: float,
) -> PathPhase:
    """Return the phase of one crossing of a path, ready to be evaluated.

    Parameters
    ----------
    l_value : float
        L of the path.
    equatorial_density_m3 : float
        Density at its equator, m^-3.
    model : FieldLineModel
        Field, density along the line, ions.
    low_hz, high_hz : float
        Frequencies wanted; the upper one below the equatorial gyrofrequency.

    Returns
    -------
    PathPhase
        The integral of the index as a spline over the range.
    """
    nodes = path_nodes(l_value, model=model)
    knots = np.linspace(np.log(low_hz), np.log(high_hz), FREQUENCY_KNOTS)
    frequency = np.exp(knots)
    half_m = np.zeros(FREQUENCY_KNOTS)
    for altitude, field_t, coordinate, arc in zip(
        nodes.altitude_m, nodes.field_t, nodes.coordinate, nodes.arc_per_coordinate_m, strict=True
    ):
        density = electron_density(
            altitude,
            l_value=l_value,
            equatorial_density_m3=equatorial_density_m3,
            density_exponent=model.density_exponent,
            layer=model.layer,
        )
        index = refractive_index(
            frequency[:, None],
            plasma_frequency_hz=np.sqrt(PLASMA_HZ2_M3 * density),
            gyrofrequency_hz=GYRO_HZ_PER_T * field_t,
            oxygen_fraction=None if model.ions is None else model.ions.oxygen_fraction(altitude),
        )
        half_m += simpson(index * arc, x=coordinate, axis=1)
    cycles = frequency * 2.0 * half_m / SPEED_OF_LIGHT_M_S
    return PathPhase(low_hz, high_hz, CubicSpline(knots, cycles))
