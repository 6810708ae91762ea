"""Pure physics of ducted whistlers on dipole field lines: SI in, SI out, no input or output."""

from fieldlines.climatology import saturated_density
from fieldlines.coldplasma import (
    group_index,
    quasi_longitudinal_group_index,
    quasi_longitudinal_refractive_index,
    refractive_index,
)
from fieldlines.density import ChapmanLayer, IonMixture, electron_density
from fieldlines.dipole import (
    CentredDipole,
    arc_length,
    dipole_coefficients,
    footpoint_latitude,
    invariant_latitude,
)
from fieldlines.errors import DomainError, FieldlinesError
from fieldlines.line import FieldLineModel, LineNodes, line_nodes
from fieldlines.nose import Nose, nose, zero_frequency_dispersion
from fieldlines.traveltime import (
    TravelTime,
    maximum_frequency,
    quasi_longitudinal_travel_time,
    travel_time,
    travel_time_jacobian,
)
from fieldlines.tube import tube_content

__all__ = [
    "CentredDipole",
    "ChapmanLayer",
    "DomainError",
    "FieldLineModel",
    "FieldlinesError",
    "IonMixture",
    "LineNodes",
    "Nose",
    "TravelTime",
    "arc_length",
    "dipole_coefficients",
    "electron_density",
    "footpoint_latitude",
    "group_index",
    "invariant_latitude",
    "line_nodes",
    "maximum_frequency",
    "nose",
    "quasi_longitudinal_group_index",
    "quasi_longitudinal_refractive_index",
    "quasi_longitudinal_travel_time",
    "refractive_index",
    "saturated_density",
    "travel_time",
    "travel_time_jacobian",
    "tube_content",
    "zero_frequency_dispersion",
]
