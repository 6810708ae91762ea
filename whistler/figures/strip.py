"""The strip that shows a whole recording, with its strokes numbered."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from whistler.figures.draw import STRENGTH_LABEL, draw_sferic, draw_spectrogram
from whistler.figures.sheet import LEFT_IN, WIDTH_IN, Box, place
from whistler.figures.style import TEXT_PT, PathStyle, path_style

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.image import AxesImage

    from whistler.measure import Measurement
    from whistler.rows import WhistlerRow
    from whistler.spectrogram import Spectrogram

SCALE_IN = 0.75  # right of the strip, for the grey scale
STRIP_WIDTH_IN = WIDTH_IN - LEFT_IN - SCALE_IN
CHARACTER_IN = 0.08  # of the numbers above the strip


def draw_overview(measurement: Measurement, ax: Axes) -> AxesImage:
    """Return the image of a whole recording; traces are marked on top and strokes numbered above.

    Parameters
    ----------
    measurement : Measurement
        At least one view.
    ax : matplotlib.axes.Axes
        Where to draw.
    """
    duration_s = measurement.recording.duration_s
    image = draw_views(measurement.views, ax, duration_s=duration_s)
    strokes = strokes_of(measurement.rows)
    for rows in strokes.values():
        draw_sferic(rows[0], ax)
        for number, row in enumerate(rows):
            _mark_top(row, ax, path_style(number))
    begins_s = {group: begin_s(rows) for group, rows in strokes.items()}
    character_s = CHARACTER_IN * duration_s / STRIP_WIDTH_IN
    for at_s, text in stroke_labels(begins_s, character_s=character_s):
        ax.text(
            at_s,
            1.04,
            text,
            transform=ax.get_xaxis_transform(),
            ha="center",
            va="bottom",
            fontsize=TEXT_PT,
        )
    return image


def _mark_top(row: WhistlerRow, ax: Axes, style: PathStyle) -> None:
    """Mark a trace at its upper end only: the strip is for seeing what was found and missed."""
    if len(row.trace.time_s):
        top = int(row.trace.frequency_hz.argmax())
        ax.plot(
            row.trace.time_s[top],
            row.trace.frequency_hz[top] / 1e3,
            color=style.colour,
            marker=style.marker,
            markersize=5.0,
            markeredgecolor="white",
            markeredgewidth=0.6,
        )


def draw_views(views: Iterable[Spectrogram], ax: Axes, *, duration_s: float) -> AxesImage:
    """Return the image of the first of consecutive spectrograms, all drawn on one time axis."""
    image, *others = (draw_spectrogram(view, ax) for view in views)
    extents = [item.get_extent() for item in (image, *others)]
    ax.set_xlim(0.0, duration_s)
    ax.set_ylim(min(extent[2] for extent in extents), max(extent[3] for extent in extents))
    return image


def draw_scale(figure: Figure, image: AxesImage, *, box: Box) -> None:
    """Draw the grey scale right of a spectrogram's box."""
    ax = place(figure, box._replace(left_in=box.left_in + box.width_in + 0.1, width_in=0.12))
    figure.colorbar(image, cax=ax, extend="both")
    ax.set_ylabel(STRENGTH_LABEL, fontsize=TEXT_PT)
    ax.tick_params(labelsize=TEXT_PT)


def stroke_labels(times_s: dict[int, float], *, character_s: float) -> list[tuple[float, str]]:
    """Return places and texts that number strokes, crowded ones under one label.

    Parameters
    ----------
    times_s : dict of int to float
        Time of each stroke by its number.
    character_s : float
        Width of a character on the time axis.

    Examples
    --------
    >>> stroke_labels({1: 2.0, 2: 10.0, 3: 10.1, 4: 10.3}, character_s=0.2)
    [(2.0, '1'), (10.15, '2–4')]
    """
    in_order = sorted(times_s.items(), key=lambda item: item[1])
    crowds = [[(time_s, group)] for group, time_s in in_order]
    k = 0
    while k + 1 < len(crowds):
        (left_s, left), (right_s, right) = _crowd_label(crowds[k]), _crowd_label(crowds[k + 1])
        if right_s - left_s < 0.5 * character_s * (len(left) + len(right) + 2):
            crowds[k : k + 2] = [crowds[k] + crowds[k + 1]]
            k = max(k - 1, 0)  # the wider label may now reach back
        else:
            k += 1
    return [_crowd_label(crowd) for crowd in crowds]


def _crowd_label(crowd: Sequence[tuple[float, int]]) -> tuple[float, str]:
    groups = sorted(group for _, group in crowd)
    text = ", ".join(map(str, groups))
    if len(groups) > 2 and groups[-1] - groups[0] == len(groups) - 1:
        text = f"{groups[0]}–{groups[-1]}"
    return 0.5 * (crowd[0][0] + crowd[-1][0]), text


def strokes_of(rows: Iterable[WhistlerRow]) -> dict[int, list[WhistlerRow]]:
    """Return rows by the number of their stroke, in the order given."""
    strokes: dict[int, list[WhistlerRow]] = {}
    for row in rows:
        strokes.setdefault(row.group, []).append(row)
    return strokes


def begin_s(rows: Sequence[WhistlerRow]) -> float:
    """Return when a stroke's sferic was, or else when its first trace begins."""
    known = [row.sferic_time_s for row in rows if math.isfinite(row.sferic_time_s)]
    first = [float(row.trace.time_s.min()) for row in rows if len(row.trace.time_s)]
    return min(known or first or [0.0])
