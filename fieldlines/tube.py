"""Electron content of a flux tube."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from fieldlines.constants import PLASMA_HZ2_M3
from fieldlines.dipole import footpoint_latitude
from fieldlines.line import FieldLineModel, line_nodes
from fieldlines.traveltime import plasma_frequency_squared


def tube_content(
    l_value: float,
    *,
    equatorial_density_m3: float,
    model: FieldLineModel,
    base_altitude_m: float = 1000e3,
) -> float:
    r"""Return the electrons above an altitude in one hemisphere of a flux tube, m^-2.

    Parameters
    ----------
    l_value : float
        McIlwain L, 1.2 to 8.
    equatorial_density_m3 : float
        Equatorial electron density, m^-3, above 0.
    model : FieldLineModel
        Everything else; its layer counts, its foot altitude does not.
    base_altitude_m : float
        Altitude of the base, where the tube has unit cross-section, m, 0 to 1100 km.

    Returns
    -------
    float
        Electrons between the base and the equator per square metre at the base, m^-2.

    Raises
    ------
    DomainError
        If an argument is outside its range.

    Notes
    -----
    .. math:: N = \int_0^{s_b} n_e \, \frac{B_b}{B} \, ds

    The usual definition (Angerami and Carpenter 1966, from memory); 1e4 times the value per cm^2.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole(3.12e-5, "round textbook value"), layer=None)
    >>> f"{tube_content(4.0, equatorial_density_m3=4e8, model=model):.4g} per m^2"
    '3.942e+17 per m^2'
    """
    base_model = replace(model, foot_altitude_m=base_altitude_m)
    nodes = line_nodes(l_value, model=base_model)
    density_m3 = (
        plasma_frequency_squared(
            nodes, equatorial_density_m3=equatorial_density_m3, model=base_model
        )
        / PLASMA_HZ2_M3
    )
    base_latitude_rad = footpoint_latitude(l_value, altitude_m=base_altitude_m)
    base_field_t = model.dipole.field_strength(l_value, magnetic_latitude_rad=base_latitude_rad)
    latitude_rad = np.arcsin(nodes.sin_latitude)
    field_t = model.dipole.field_strength(l_value, magnetic_latitude_rad=latitude_rad)
    # The nodes stand for two hemispheres.
    return float(0.5 * np.sum(nodes.weight_m * density_m3 / field_t) * base_field_t)
