"""The field-line model, and quadrature nodes along the line.

Integrals along the path run over x = sin(magnetic latitude) from the equator to the foot and are
doubled: the default model is the same in both hemispheres. The range is cut into panels at fixed
altitudes, where the ionosphere bends the integrand, each with Gauss-Legendre nodes.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from fieldlines.constants import EARTH_RADIUS_M, HIGHEST_FOOT_M
from fieldlines.density import ChapmanLayer, IonMixture
from fieldlines.dipole import CentredDipole
from fieldlines.errors import FloatArray, require_l_value, require_within

_DEFAULT_LAYER = ChapmanLayer(5e6, 300e3, 60e3)
_DEFAULT_IONS = IonMixture()


@dataclass(frozen=True)
class FieldLineModel:
    """Everything that fixes the travel time apart from L and the equatorial density.

    Parameters
    ----------
    dipole : CentredDipole
        The field.
    density_exponent : float
        Exponent alpha of the power law, -2 to 8.
    layer : ChapmanLayer or None
        Ionospheric layer at each end; None leaves it out.
    ions : IonMixture or None
        Ion make-up; None counts electrons only.
    foot_altitude_m : float
        Altitude of both ends of the path, m, 0 to 1100 km.

    Raises
    ------
    DomainError
        If the exponent or the altitude is outside its range.

    Examples
    --------
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> model.layer.peak_altitude_m
    300000.0
    """

    dipole: CentredDipole
    density_exponent: float = 1.0
    layer: ChapmanLayer | None = _DEFAULT_LAYER
    ions: IonMixture | None = _DEFAULT_IONS
    foot_altitude_m: float = 100e3

    def __post_init__(self) -> None:
        """Check the ranges."""
        require_within(
            "density_exponent",
            self.density_exponent,
            low=-2.0,
            high=8.0,
            next_step="choose an exponent a plasmasphere can have (0 to 4 is usual)",
        )
        require_within(
            "foot_altitude_m",
            self.foot_altitude_m,
            low=0.0,
            high=HIGHEST_FOOT_M,
            unit="m",
            next_step="end the path between the ground and 1100 km",
        )


@dataclass(frozen=True)
class LineNodes:
    """Quadrature nodes along a whole field line, both hemispheres.

    ``sum(weight_m * integrand)`` is the integral along the path from foot to foot of an integrand
    that is even about the equator.

    Parameters
    ----------
    l_value : float
        McIlwain L of the line.
    sin_latitude : ndarray, shape (m,)
        Sine of the magnetic latitude.
    altitude_m : ndarray, shape (m,)
        Altitude, m.
    gyrofrequency_hz : ndarray, shape (m,)
        Electron gyrofrequency, Hz.
    weight_m : ndarray, shape (m,)
        Quadrature weight times path length, m.
    """

    l_value: float
    sin_latitude: FloatArray
    altitude_m: FloatArray
    gyrofrequency_hz: FloatArray
    weight_m: FloatArray


@dataclass(frozen=True)
class LineNodeChanges:
    """Derivatives of the fields of :class:`LineNodes` with respect to ln L.

    Parameters
    ----------
    sin_latitude, altitude_m, gyrofrequency_hz, weight_m : ndarray, shape (m,)
        As in :class:`LineNodes`, per unit of ln L.
    """

    sin_latitude: FloatArray
    altitude_m: FloatArray
    gyrofrequency_hz: FloatArray
    weight_m: FloatArray


@dataclass(frozen=True)
class _Panels:
    """Panels between fixed altitudes (the last ends at the equator) and their unit nodes."""

    break_altitude_m: FloatArray  # (p,), rising: the lower end of each panel
    panel: npt.NDArray[np.intp]  # (m,), panel of each node
    position: FloatArray  # (m,), 0 at the panel's lower end, 1 at its upper end
    weight: FloatArray  # (m,), sums to 1 in each panel


# Orders keep the quadrature error under 1e-10 for L 1.25 to 7, alpha 0 to 4, foF2 0 to 12 MHz,
# hmF2 250 to 400 km and scale heights 40 to 80 km (tests/fieldlines holds that).
_FOOT_ORDER = 18
_EQUATOR_ORDER = 36
# Reduced altitude and order: the layer's lower edge needs the closest panels.
_LAYER_BREAKS = ((-3.5, 18), (-2.5, 12), (-1.5, 10), (0.0, 20))
# Altitude and order: the layer's tail fades into the power law up here.
_FIXED_BREAKS = ((1000e3, 18), (2000e3, 16), (4000e3, 10))
# No break nearer the apex than this share of its altitude, where sin(latitude) is steep in it.
_CEILING = 0.6
_NARROWEST_PANEL_M = 10e3


@lru_cache(maxsize=64)
def _unit_nodes(order: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre nodes and weights on 0..1."""
    node, weight = np.polynomial.legendre.leggauss(order)
    return 0.5 * (1.0 + node), 0.5 * weight


@lru_cache(maxsize=256)
def _breaks(foot_altitude_m: float, layer: ChapmanLayer | None) -> tuple[tuple[float, int], ...]:
    """Lower altitude and order of every panel that a long enough line has."""
    candidates = list(_FIXED_BREAKS)
    if layer is not None:
        peak_m, scale_m = layer.peak_altitude_m, layer.scale_height_m
        candidates += [(peak_m + y * scale_m, order) for y, order in _LAYER_BREAKS]
    kept = [(foot_altitude_m, _FOOT_ORDER)]
    for altitude_m, order in sorted(candidates):
        if altitude_m > kept[-1][0] + _NARROWEST_PANEL_M:
            kept.append((altitude_m, order))
    return tuple(kept)


@lru_cache(maxsize=256)
def _panels(foot_altitude_m: float, layer: ChapmanLayer | None, count: int) -> _Panels:
    """Unit nodes of the lowest panels, the last of them stretched to the equator."""
    breaks = _breaks(foot_altitude_m, layer)[:count]
    orders = [order for _, order in breaks[:-1]] + [_EQUATOR_ORDER]
    nodes = [_unit_nodes(order) for order in orders]
    return _Panels(
        np.array([altitude_m for altitude_m, _ in breaks]),
        np.repeat(np.arange(count), orders),
        np.concatenate([node for node, _ in nodes]),
        np.concatenate([weight for _, weight in nodes]),
    )


def line_nodes(l_value: float, *, model: FieldLineModel) -> LineNodes:
    r"""Return quadrature nodes along a field line.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    model : FieldLineModel
        The field and the ends of the path.

    Returns
    -------
    LineNodes
        Nodes from foot to equator, standing for both hemispheres.

    Raises
    ------
    DomainError
        If L is outside its range.

    Notes
    -----
    .. math:: ds = L R_E \sqrt{1 + 3x^2}\,dx, \quad
              f_H = f_{Heq} \sqrt{1 + 3x^2} / (1 - x^2)^3

    Examples
    --------
    >>> model = FieldLineModel(CentredDipole(3.12e-5, "round textbook value"))
    >>> f"{line_nodes(4.0, model=model).weight_m.sum() / 1e3:.2f} km"
    '57159.22 km'
    """
    line_l = require_l_value(l_value)
    scale_m = line_l * EARTH_RADIUS_M
    panels, x_low, width = _panel_sines(scale_m, model)
    x = x_low[panels.panel] + width[panels.panel] * panels.position
    cosine_squared = 1.0 - x * x
    stretch = np.sqrt(1.0 + 3.0 * x * x)
    equatorial_hz = model.dipole.equatorial_gyrofrequency(line_l)
    return LineNodes(
        line_l,
        x,
        scale_m * cosine_squared - EARTH_RADIUS_M,
        equatorial_hz * stretch / cosine_squared**3,
        # Twice for the two hemispheres; the width is negative because x falls towards the equator.
        -2.0 * scale_m * stretch * width[panels.panel] * panels.weight,
    )


def line_node_changes(nodes: LineNodes, *, model: FieldLineModel) -> LineNodeChanges:
    r"""Return how the nodes of a line move when its L changes, per unit of ln L.

    Parameters
    ----------
    nodes : LineNodes
        Nodes from :func:`line_nodes`.
    model : FieldLineModel
        The model the nodes were made with.

    Returns
    -------
    LineNodeChanges
        Derivatives with respect to ln L.

    Notes
    -----
    The ends of a panel stay at their altitudes, so :math:`dx/d\ln L = (1 - x^2)/(2x)` there; nodes
    in between keep their place in the panel.
    """
    scale_m = nodes.l_value * EARTH_RADIUS_M
    panels, x_low, width = _panel_sines(scale_m, model)
    low_change = (1.0 - x_low**2) / (2.0 * x_low)
    width_change = np.append(low_change[1:], 0.0) - low_change
    x = nodes.sin_latitude
    x_change = low_change[panels.panel] + width_change[panels.panel] * panels.position
    cosine_squared = 1.0 - x * x
    stretch_change = 3.0 * x * x_change / (1.0 + 3.0 * x * x)
    return LineNodeChanges(
        x_change,
        scale_m * (cosine_squared - 2.0 * x * x_change),
        nodes.gyrofrequency_hz * (stretch_change + 6.0 * x * x_change / cosine_squared - 3.0),
        nodes.weight_m * (1.0 + stretch_change + (width_change / width)[panels.panel]),
    )


def _panel_sines(scale_m: float, model: FieldLineModel) -> tuple[_Panels, FloatArray, FloatArray]:
    """Panels, sine of latitude at each lower end, and (negative) width in that sine."""
    ceiling_m = _CEILING * (scale_m - EARTH_RADIUS_M)
    breaks = _breaks(model.foot_altitude_m, model.layer)
    count = max(1, sum(altitude_m < ceiling_m for altitude_m, _ in breaks))
    panels = _panels(model.foot_altitude_m, model.layer, count)
    x_low = np.sqrt(1.0 - (EARTH_RADIUS_M + panels.break_altitude_m) / scale_m)
    return panels, x_low, np.append(x_low[1:], 0.0) - x_low
