"""Rows of results as a table of at most 80 columns."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import NamedTuple

from whistler.clock import iso_time
from whistler.errors import printable
from whistler.recording import Recording
from whistler.rows import WhistlerRow

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


def _density(value: float) -> str:
    """Return a density or its sigma with about two significant digits, never with an exponent."""
    return _number(value, ".0f" if value >= 10 else ".1f" if value >= 1 else ".2f")


_FIELDS = (
    _Field("grp", 3, lambda row: str(row.group)),
    _Field("time", 10, lambda row: _number(row.sferic_time_s, ".3f") + " *"[row.sferic_seen]),
    _Field("hop", 3, lambda row: str(row.hops)),
    _Field("L", 6, lambda row: _number(row.l_value, ".3f")),
    _Field("±", 6, lambda row: _number(row.l_value_sd, ".3f" if row.l_value_sd > 1e-3 else ".4f")),
    _Field("(±)", 6, lambda row: f"({_number(row.l_value_profile_sd, '.2f')})"),
    _Field("n/cm3", 7, lambda row: _density(row.equatorial_density_cm3)),
    _Field("±", 5, lambda row: _density(row.equatorial_density_sd_cm3)),
    _Field("(±)", 7, lambda row: f"({_density(row.equatorial_density_profile_sd_cm3)})"),
    _Field("D0", 5, lambda row: _number(row.dispersion_s_sqrt_hz, ".1f")),
    _Field("dB", 4, lambda row: _number(row.snr_db, ".0f")),
    _Field("stat", 5, lambda row: STATUS_WORDS.get(row.uncertainty_status, row.uncertainty_status)),
)


def recording_table(recording: Recording, rows: Sequence[WhistlerRow]) -> str:
    """Return heading and table of one recording, without a legend.

    Parameters
    ----------
    recording : Recording
        For the heading.
    rows : sequence of WhistlerRow
        Its whistlers.

    Returns
    -------
    str
        Lines of at most 80 characters, except a long file name's.
    """
    began = iso_time(recording.start_time) or "unknown time"
    lines = [
        printable(recording.path),
        f"  {recording.duration_s:.1f} s at {recording.sample_rate_hz} Hz from {began}",
    ]
    return "\n".join([*lines, rows_table(rows)])


def rows_table(rows: Sequence[WhistlerRow]) -> str:
    """Return a table of rows, or a line that says there are none."""
    if not rows:
        return "  no whistlers found"
    head = " ".join(f"{field.title:>{field.width}}" for field in _FIELDS)
    body = [
        " ".join(f"{field.show(row):>{field.width}}" for field in _FIELDS).rstrip() for row in rows
    ]
    return "\n".join([head, *body])


def legend() -> str:
    """Return the lines that explain the columns."""
    return "\n".join(LEGEND)
