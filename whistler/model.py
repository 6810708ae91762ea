"""The field-line model that settings and a date ask for."""

from __future__ import annotations

from fieldlines import CentredDipole, ChapmanLayer, FieldLineModel
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
