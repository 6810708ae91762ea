"""Rows of results as a table of at most 80 columns."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, NamedTuple

from whistler.clock import iso_time
from whistler.errors import printable
from whistler.rows import WhistlerRow
from whistler.settings import Settings

if TYPE_CHECKING:
    from whistler.measure import Measurement

STATUS_WORDS = {"undetermined": "undet", "at-bound": "bound", "prior-dominated": "prior"}
LEGEND = (
    "grp     rows of one lightning stroke share it; time: its sferic, s (* seen)",
    "±, (±)  one-sigma given the model; from not knowing profile, ionosphere, stroke",
    "n/cm3   equatorial electron density; D0: zero-frequency dispersion, s Hz^1/2",
    "stat    ok, or why a sigma is missing: undet(ermined), bound, prior(-dominated)",
)


class _Field(NamedTuple):
    title: str
    width: int
    show: Callable[[WhistlerRow], str]


def _number(value: float, form: str) -> str:
    return format(value, form) if math.isfinite(value) else "-"


def _l_sigma(value: float) -> str:
    """Return the profile sigma of L with two decimals, three where it is small."""
    return _number(value, ".2f" if value >= 0.1 else ".3f")


def _density(value: float) -> str:
    """Return a density or its sigma with about two significant digits, never with an exponent."""
    return _number(value, ".0f" if value >= 10 else ".1f" if value >= 1 else ".2f")


_FIELDS = (
    _Field("grp", 3, lambda row: str(row.group)),
    _Field("time", 10, lambda row: _number(row.sferic_time_s, ".3f") + " *"[row.sferic_seen]),
    _Field("hop", 3, lambda row: str(row.hops)),
    _Field("L", 6, lambda row: _number(row.l_value, ".3f")),
    _Field("±", 6, lambda row: _number(row.l_value_sd, ".3f" if row.l_value_sd > 1e-3 else ".4f")),
    _Field("(±)", 7, lambda row: f"({_l_sigma(row.l_value_profile_sd)})"),
    _Field("n/cm3", 7, lambda row: _density(row.equatorial_density_cm3)),
    _Field("±", 5, lambda row: _density(row.equatorial_density_sd_cm3)),
    _Field("(±)", 7, lambda row: f"({_density(row.equatorial_density_profile_sd_cm3)})"),
    _Field("D0", 5, lambda row: _number(row.dispersion_s_sqrt_hz, ".1f")),
    _Field("dB", 4, lambda row: _number(row.snr_db, ".0f")),
    _Field("stat", 5, lambda row: STATUS_WORDS.get(row.uncertainty_status, row.uncertainty_status)),
)


def recording_table(measurement: Measurement) -> str:
    """Return heading and table of one recording, without a legend.

    Parameters
    ----------
    measurement : Measurement
        The recording and its whistlers.

    Returns
    -------
    str
        Lines of at most 80 characters, except a long file name's.
    """
    recording, rate = measurement.recording, measurement.false_alarms_per_hour
    began = iso_time(recording.start_time) or "unknown time"
    lines = [
        printable(recording.path),
        f"  {recording.duration_s:.1f} s at {recording.sample_rate_hz} Hz from {began}",
    ]
    if math.isfinite(rate):
        lines.append(f"  false alarms to expect: {rate:.2g} an hour, by this recording reversed")
    return "\n".join([*lines, rows_table(measurement.rows)])


def rows_table(rows: Sequence[WhistlerRow]) -> str:
    """Return a table of rows, or a line that says there are none."""
    if not rows:
        return "  no whistlers found"
    head = " ".join(f"{field.title:>{field.width}}" for field in _FIELDS)
    body = [
        " ".join(f"{field.show(row):>{field.width}}" for field in _FIELDS).rstrip() for row in rows
    ]
    return "\n".join([head, *body])


def legend(settings: Settings | None = None) -> str:
    """Return the lines that explain the columns, and those that tell what was declared.

    Parameters
    ----------
    settings : Settings, optional
        What the rows were made with: a prior that entered the fits, another profile or ionosphere.
    """
    return "\n".join([*LEGEND, *(_declared(settings) if settings else ())])


def _declared(settings: Settings) -> Iterator[str]:
    """Yield a line for every prior or model that is not the default."""
    if settings.fit_prior != "none":
        factor = settings.density_prior_factor
        times = "" if factor == 1.0 else f"{factor:g} times "
        yield (
            f"prior   {times}the density climatology ± {settings.fit_prior_sd_dex:g} decades "
            "entered every fit"
        )
    plain = Settings()
    alpha = (settings.density_exponent, settings.density_exponent_sd)
    if alpha != (plain.density_exponent, plain.density_exponent_sd):
        yield f"alpha   {alpha[0]:g} ± {alpha[1]:g} declared (density along the line: r^-alpha)"
    station = settings.station
    if (station.fo_f2_sd_mhz, station.hm_f2_sd_km) != (None, None):
        fo_f2_sd_mhz = settings.critical_frequency_sd_hz / 1e6
        hm_f2_sd_km = settings.peak_altitude_sd_m / 1e3
        yield (
            f"F2      foF2 {station.fo_f2_mhz:g} ± {fo_f2_sd_mhz:g} MHz, "
            f"hmF2 {station.hm_f2_km:g} ± {hm_f2_sd_km:g} km declared"
        )
