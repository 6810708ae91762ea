"""Pure physics of ducted whistlers on dipole field lines: SI in, SI out, no input or output."""

from fieldlines.climatology import AMBIENT_LN_DENSITY_SD, saturated_density
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
from fieldlines.ground import (
    GeomagneticPoint,
    GroundPoint,
    conjugate_point,
    geomagnetic_pole,
    ground_distance,
    to_geographic,
    to_geomagnetic,
)
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
    "AMBIENT_LN_DENSITY_SD",
    "CentredDipole",
    "ChapmanLayer",
    "DomainError",
    "FieldLineModel",
    "FieldlinesError",
    "GeomagneticPoint",
    "GroundPoint",
    "IonMixture",
    "LineNodes",
    "Nose",
    "TravelTime",
    "arc_length",
    "conjugate_point",
    "dipole_coefficients",
    "electron_density",
    "footpoint_latitude",
    "geomagnetic_pole",
    "ground_distance",
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
    "to_geographic",
    "to_geomagnetic",
    "travel_time",
    "travel_time_jacobian",
    "tube_content",
    "zero_frequency_dispersion",
]
