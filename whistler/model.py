"""The field-line model that settings and a date ask for."""

from __future__ import annotations

import numpy as np

from fieldlines import CentredDipole, ChapmanLayer, FieldLineModel
from fieldlines.ground import GroundPoint, to_geomagnetic
from whistler.settings import Settings


def field_line_model(settings: Settings, *, decimal_year: float) -> FieldLineModel:
    """Return the field-line model that settings and a date ask for.

    Parameters
    ----------
    settings : Settings
        Density exponent, and the station's ionosphere.
    decimal_year : float
        Date of the dipole, 1900 to 2030.

    Returns
    -------
    fieldlines.FieldLineModel
        Field, profile and ions.
    """
    station = settings.station
    layer = ChapmanLayer(
        station.critical_frequency_hz, station.peak_altitude_m, station.scale_height_m
    )
    return FieldLineModel(
        CentredDipole.from_date(decimal_year),
        density_exponent=settings.density_exponent,
        layer=layer,
    )


def receiver_latitude(settings: Settings, *, decimal_year: float) -> float | None:
    """Return the receiver's geomagnetic latitude, rad; None when the station has no position.

    Parameters
    ----------
    settings : Settings
        With the station.
    decimal_year : float
        Date of the dipole, 1900 to 2030.

    Returns
    -------
    float or None
        Latitude in the centred dipole.
    """
    station = settings.station
    if station.latitude_deg is None or station.longitude_deg is None:
        return None
    place = GroundPoint(station.latitude_deg, station.longitude_deg)
    return float(np.radians(to_geomagnetic(place, decimal_year=decimal_year).latitude_deg))
