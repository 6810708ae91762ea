"""One row of results, and the one table that says what its columns mean."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import numpy as np

from fieldlines import FieldLineModel
from whistler.trace import Trace

TIME_DECIMALS = 6  # times in day-long recordings to a microsecond
FREQUENCY_DECIMALS = 3  # of a point: five hops at 1 kHz move by 3 ms in a hertz
SIGNIFICANT_DIGITS = 6
NAN = float("nan")
NO_TRACE = Trace(np.empty(0), np.empty(0), np.empty(0))


@dataclass(frozen=True)
class WhistlerRow:
    """One traced path of one hop order; NaN where a number is undetermined.

    The meaning of every field stands in :data:`COLUMNS`.
    """

    recording: str
    group: int
    sferic_time_s: float = NAN
    sferic_time_sd_s: float = NAN
    sferic_seen: bool = False
    sferic_probability: float = NAN
    lightning_time_s: float = NAN
    time: str | None = None
    hops: int = 1
    hop_probability: float = NAN
    l_value: float = NAN
    l_value_sd: float = NAN
    l_value_profile_sd: float = NAN
    l_value_low: float = NAN
    l_value_high: float = NAN
    equatorial_density_cm3: float = NAN
    equatorial_density_sd_cm3: float = NAN
    equatorial_density_profile_sd_cm3: float = NAN
    equatorial_density_low_cm3: float = NAN
    equatorial_density_high_cm3: float = NAN
    l_density_correlation: float = NAN
    density_exponent: float = NAN
    fo_f2_mhz: float = NAN
    dispersion_s_sqrt_hz: float = NAN
    nose_frequency_hz: float = NAN
    nose_time_s: float = NAN
    equatorial_gyrofrequency_hz: float = NAN
    tube_content_m2: float = NAN
    tube_content_sd_m2: float = NAN
    tube_content_profile_sd_m2: float = NAN
    frequency_low_hz: float = NAN
    frequency_high_hz: float = NAN
    snr_db: float = NAN
    significance: float = NAN
    fit_rms_s: float = NAN
    centre_share_sd: float = NAN
    uncertainty_status: str = "undetermined"
    flags: tuple[str, ...] = ()
    trace: Trace = NO_TRACE


class Column(NamedTuple):
    """One column of the catalogue: name, unit (None without one), type and description."""

    name: str
    unit: str | None
    type: str
    description: str


COLUMNS = (
    Column("recording", None, "string", "recording, as given"),
    Column("group", None, "integer", "rows from one lightning stroke share it"),
    Column(
        "sferic_time_s", "s", "double", "causative sferic at the receiver, from the first sample"
    ),
    Column("sferic_time_sd_s", "s", "double", "one-sigma of the sferic time"),
    Column("sferic_seen", None, "boolean", "whether an actual sferic was identified there"),
    Column("sferic_probability", None, "double", "probability of the likeliest sferic seen"),
    Column("lightning_time_s", "s", "double", "lightning: sferic time less its waveguide path"),
    Column("time", "UTC", "isotime", "sferic time on the clock"),
    Column("hops", None, "integer", "field-line crossings"),
    Column("hop_probability", None, "double", "probability of that number of crossings"),
    Column("l_value", None, "double", "L of the path"),
    Column("l_value_sd", None, "double", "statistical one-sigma of L"),
    Column("l_value_profile_sd", None, "double", "one-sigma of L from profile, ionosphere, stroke"),
    Column("l_value_low", None, "double", "statistical interval of 95 % of L: lower end"),
    Column("l_value_high", None, "double", "its upper end"),
    Column("equatorial_density_cm3", "cm-3", "double", "electron density at the equator"),
    Column("equatorial_density_sd_cm3", "cm-3", "double", "its statistical one-sigma"),
    Column(
        "equatorial_density_profile_sd_cm3",
        "cm-3",
        "double",
        "its one-sigma from profile, ionosphere, stroke",
    ),
    Column(
        "equatorial_density_low_cm3",
        "cm-3",
        "double",
        "statistical interval of 95 % of density: lower end",
    ),
    Column("equatorial_density_high_cm3", "cm-3", "double", "its upper end"),
    Column("l_density_correlation", None, "double", "correlation of L and ln density"),
    Column("density_exponent", None, "double", "exponent of the density of the row's model"),
    Column("fo_f2_mhz", "MHz", "double", "critical frequency of its F2 layer"),
    Column("dispersion_s_sqrt_hz", "s Hz0.5", "double", "zero-frequency dispersion of one hop"),
    Column("nose_frequency_hz", "Hz", "double", "nose frequency of the fitted model"),
    Column("nose_time_s", "s", "double", "nose delay after the lightning, one hop"),
    Column("equatorial_gyrofrequency_hz", "Hz", "double", "electron gyrofrequency at the equator"),
    Column("tube_content_m2", "m-2", "double", "electrons above 1000 km per area at 1000 km"),
    Column("tube_content_sd_m2", "m-2", "double", "its statistical one-sigma"),
    Column(
        "tube_content_profile_sd_m2",
        "m-2",
        "double",
        "its one-sigma from profile, ionosphere, stroke",
    ),
    Column("frequency_low_hz", "Hz", "double", "lowest traced frequency"),
    Column("frequency_high_hz", "Hz", "double", "highest traced frequency"),
    Column("snr_db", "dB", "double", "median power over noise along the trace"),
    Column("significance", "h-1", "double", "false alarms expected in an hour this strong"),
    Column("fit_rms_s", "s", "double", "rms of trace minus model"),
    Column(
        "centre_share_sd",
        None,
        "double",
        "one-sigma of the trace within its thickness, as a share of travel time",
    ),
    Column("uncertainty_status", None, "string", "ok, or why a sigma is missing"),
    Column("flags", None, "string", "short words, separated by spaces"),
)
"""Columns of the catalogue in order; the trace is left out of the table."""


def row_model(row: WhistlerRow, *, default: FieldLineModel) -> FieldLineModel:
    """Return the model that a row's numbers are given: the default one, or what was fitted of it.

    Parameters
    ----------
    row : WhistlerRow
        The row; where it does not tell its model, of before it did, that is the default one.
    default : fieldlines.FieldLineModel
        The model of the row's settings and date.
    """
    if not math.isfinite(row.density_exponent):
        return default
    layer = default.layer
    if layer is not None and math.isfinite(row.fo_f2_mhz):
        layer = replace(layer, critical_frequency_hz=1e6 * row.fo_f2_mhz)
    return replace(default, density_exponent=row.density_exponent, layer=layer)


def row_values(row: WhistlerRow) -> dict[str, Any]:
    """Return a row as plain values: the columns in order, then the trace."""
    values: dict[str, Any] = {}
    for column in COLUMNS:
        decimals = TIME_DECIMALS if column.unit == "s" else None
        values[column.name] = plain(getattr(row, column.name), decimals=decimals)
    values["trace"] = {
        "frequency_hz": [
            plain(value, decimals=FREQUENCY_DECIMALS) for value in row.trace.frequency_hz
        ],
        "time_s": [plain(value, decimals=TIME_DECIMALS) for value in row.trace.time_s],
        "time_sd_s": [plain(value, decimals=TIME_DECIMALS) for value in row.trace.time_sd_s],
    }
    return values


def plain(value: Any, *, decimals: int | None = None) -> Any:
    """Return a value that strict JSON can hold, rounded; NaN and infinity become None.

    Parameters
    ----------
    value : object
        Number, text, tuple of texts or None; numpy scalars too.
    decimals : int, optional
        Digits after the point; by default 6 significant digits.

    Examples
    --------
    >>> plain(0.1234567), plain(float("nan")), plain(True), plain(12.3456789, decimals=3)
    (0.123457, None, True, 12.346)
    """
    if value is None or isinstance(value, str | bool | int):
        return value
    if isinstance(value, tuple):
        return list(value)
    if isinstance(value, np.bool_ | np.integer):
        return value.item()
    number = float(value)
    if not math.isfinite(number):
        return None
    if decimals is not None:
        return round(number, decimals) + 0.0  # no negative zero
    return float(f"{number:.{SIGNIFICANT_DIGITS}g}")
