"""Colours, markers and words that the figures share."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

from matplotlib.font_manager import FontProperties, findfont, get_font

from whistler.errors import printable
from whistler.rows import WhistlerRow

TEXT_PT = 8.0  # smallest text at saved size
TITLE_PT = 10.0
MAP = "Greys"  # noise white, signal black: prints as it shows, and lets coloured lines stand out
STRENGTH_DB = (0.0, 18.0)  # power over noise from white to black
NAME_LENGTH = 70
STATUS_WORDS = {
    "undetermined": "undetermined",
    "at-bound": "not determined (fit at a bound)",
    "prior-dominated": "led by the prior",
}
TOLD_FLAGS = ("density-prior", "profile-fitted")  # what the numbers rest on beside the default
# Okabe and Ito's colours without the yellow, which white paper swallows, in an order that changes
# lightness from each to the next. Cycles of 7 and 8 have no common factor, so 56 paths differ.
_COLOURS = ("#0072B2", "#E69F00", "#D55E00", "#56B4E9", "#009E73", "#CC79A7", "#000000")
_MARKERS = ("o", "s", "^", "D", "P", "<", "X", ">")
_DASHES = ((4.0, 2.0), (1.5, 1.5), (6.0, 1.5, 1.5, 1.5))


@dataclass(frozen=True)
class PathStyle:
    """How one row looks wherever it is drawn.

    Parameters
    ----------
    colour, marker : str
        Of lines and points.
    dashes : tuple of float
        Pattern of the curve outside the traced band, in line widths.
    """

    colour: str
    marker: str
    dashes: tuple[float, ...]


def path_style(number: int) -> PathStyle:
    """Return the look of the row of this number within its stroke, from 0.

    Examples
    --------
    >>> path_style(0).marker, path_style(1).marker
    ('o', 's')
    """
    return PathStyle(
        _COLOURS[number % len(_COLOURS)],
        _MARKERS[number % len(_MARKERS)],
        _DASHES[number % len(_DASHES)],
    )


def row_label(row: WhistlerRow) -> str:
    """Return hops, L and density of a row with their one-sigmas, on one line.

    Examples
    --------
    >>> row_label(WhistlerRow("a.wav", 1, l_value=2.5, l_value_sd=0.01, l_value_profile_sd=0.04,
    ...     equatorial_density_cm3=1200.0, equatorial_density_sd_cm3=16.0,
    ...     equatorial_density_profile_sd_cm3=280.0, uncertainty_status="ok"))
    '1 hop: L 2.500 ± 0.010 (± 0.04), n 1200 ± 16 (± 280) cm⁻³'
    """
    hops = f"{row.hops} hop{'s' if row.hops > 1 else ''}"
    status = STATUS_WORDS.get(row.uncertainty_status, row.uncertainty_status)
    if not math.isfinite(row.l_value):
        return f"{hops}: L and n {status}"
    if row.uncertainty_status != "ok":
        return f"{hops}: L {row.l_value:.2f}, n {row.equatorial_density_cm3:.0f} cm⁻³, {status}"
    told = [flag.replace("-", " ") for flag in TOLD_FLAGS if flag in row.flags]
    path = _with_sd(row.l_value, row.l_value_sd, least_decimals=3)
    density = _with_sd(row.equatorial_density_cm3, row.equatorial_density_sd_cm3)
    return (
        f"{hops}: L {path} (± {_sd_text(row.l_value_profile_sd, least_decimals=2)}), "
        f"n {density} (± {row.equatorial_density_profile_sd_cm3:.0f}) " + ", ".join(["cm⁻³", *told])
    )


def _with_sd(value: float, sd: float, *, least_decimals: int = 0) -> str:
    """Value and one-sigma to the decimals that show the first digit of the sigma."""
    decimals = _decimals(sd, least_decimals)
    return f"{value:.{decimals}f} ± {sd:.{decimals}f}"


def _sd_text(sd: float, *, least_decimals: int) -> str:
    return f"{sd:.{_decimals(sd, least_decimals)}f}"


def _decimals(sd: float, least: int) -> int:
    """Decimals that show the first digit of a sigma, and at least so many."""
    known = math.isfinite(sd) and sd > 0.0
    return max(least, -math.floor(math.log10(sd))) if known else least


def stroke_heading(row: WhistlerRow) -> str:
    """Return what is known of a stroke's sferic, from any of its rows.

    Examples
    --------
    >>> stroke_heading(WhistlerRow("a.wav", 3, sferic_time_s=2.14, sferic_time_sd_s=0.004))
    'Stroke 3: sferic predicted at 2.140 ± 0.004 s'
    """
    if not math.isfinite(row.sferic_time_s):
        return f"Stroke {row.group}: sferic time undetermined"
    clock = f" ({row.time[11:23]} UTC)" if row.time else ""
    if row.sferic_seen:
        return f"Stroke {row.group}: sferic identified at {row.sferic_time_s:.3f} s{clock}"
    sd = f" ± {row.sferic_time_sd_s:.3f}" if math.isfinite(row.sferic_time_sd_s) else ""
    return f"Stroke {row.group}: sferic predicted at {row.sferic_time_s:.3f}{sd} s{clock}"


def shown_name(text: str, *, most: int = NAME_LENGTH) -> str:
    r"""Return a name that the font can show on one line, shortened in the middle.

    Parameters
    ----------
    text : str
        Any text, bytes that are not UTF-8 as surrogates.
    most : int
        Characters to keep.

    Examples
    --------
    >>> print(shown_name("night$1\n.wav"), shown_name("abcdefghij", most=5))
    night$1\n.wav ab…ij
    """
    shown = "".join(_with_glyph(character) for character in printable(text))
    if len(shown) <= most:
        return shown
    head = (most - 1) // 2
    return f"{shown[:head]}…{shown[len(shown) - (most - 1 - head) :]}"


@lru_cache(maxsize=1024)
def _with_glyph(character: str) -> str:
    font = get_font(findfont(FontProperties()))
    if font.get_char_index(ord(character)):
        return character
    return character.encode("unicode_escape").decode("ascii")
