"""Whole figures: a recording, one stroke of it, its spectrogram alone."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from pathlib import Path, PurePath
from typing import TYPE_CHECKING

from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from whistler.cleaning import clean
from whistler.clock import iso_time
from whistler.figures.draw import (
    STRENGTH_LABEL,
    draw_curve,
    draw_nose,
    draw_residual_panel,
    draw_sferic,
    draw_spectrogram,
    draw_time_line,
    draw_trace,
    has_model,
    label_axes,
)
from whistler.figures.style import (
    TEXT_PT,
    TITLE_PT,
    path_style,
    row_label,
    shown_name,
    stroke_heading,
)
from whistler.savefile import write_whole
from whistler.settings import Settings
from whistler.spectrogram import spectrogram

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.image import AxesImage

    from whistler.measure import Measurement
    from whistler.recording import Recording
    from whistler.rows import WhistlerRow
    from whistler.spectrogram import Spectrogram

SAVED_DPI = 120
SHOWN_DPI = 80  # in a notebook
MOST_PANELS = 12
WIDE_UP_TO = 2  # strokes that get the full width
LEAD_S = 0.12  # shown before the sferic
BLOCK_S = 120.0
# Inches.
WIDTH, LEFT, RIGHT, GAP = 12.0, 0.65, 0.3, 0.7
TITLE, STRIP, AXIS, KEY, LINE = 0.62, 1.5, 0.62, 0.62, 0.165
PANEL, RESIDUALS, BETWEEN = 2.2, 1.25, 0.12
FOOTNOTE = (
    "± one-sigma given the model; (±) from not knowing density profile, ionosphere and stroke "
    "position. L: path; n: equatorial electron density."
)


class NotebookFigure(Figure):
    """A figure that notebooks show by itself, once, whatever their backend."""

    def _repr_png_(self) -> bytes:
        return _png(self, dpi=SHOWN_DPI)


def save_recording_figure(measurement: Measurement, path: Path) -> None:
    """Write the figure of a recording as PNG, whole or not at all.

    Parameters
    ----------
    measurement : Measurement
        What was measured.
    path : Path
        File to write; the same measurement gives the same bytes.

    Raises
    ------
    OutputError
        When it cannot be written.
    """
    write_whole(Path(path), _png(plot_recording(measurement), dpi=SAVED_DPI))


def _png(figure: Figure, *, dpi: int) -> bytes:
    content = io.BytesIO()
    figure.savefig(content, format="png", dpi=dpi, metadata={"Software": None})
    return content.getvalue()


def plot_recording(measurement: Measurement) -> NotebookFigure:
    """Return the figure of a recording: all of it in a strip, then each stroke enlarged.

    Parameters
    ----------
    measurement : Measurement
        What was measured. Of more than twelve strokes the strongest are enlarged. Without a
        spectrogram, as in long recordings, L and density against time are shown instead.

    Returns
    -------
    NotebookFigure
        A matplotlib figure.
    """
    strokes = _strokes(measurement.rows)
    if not measurement.views and strokes:
        return _time_line_figure(measurement)
    shown = _strongest(strokes)
    columns = 1 if len(shown) <= WIDE_UP_TO else 2
    lines = [
        max(len(rows) for rows in shown[first : first + columns])
        for first in range(0, len(shown), columns)
    ]
    heights = [(count + 1.6) * LINE + PANEL + AXIS for count in lines]
    strip = STRIP if shown else 2.0 * STRIP
    figure = _sheet(TITLE + strip + AXIS + sum(heights) + KEY)
    _write_title(figure, measurement, enlarged=len(shown), strokes=len(strokes))
    if measurement.views:
        ax = _axes(figure, LEFT, TITLE, WIDTH - LEFT - RIGHT - 0.6, strip)
        image = draw_overview(measurement, ax)
        _scale(figure, image, TITLE, strip)
    width = (WIDTH - LEFT - RIGHT - (columns - 1) * GAP) / columns
    top = TITLE + strip + AXIS
    for number, rows in enumerate(shown):
        line, column = divmod(number, columns)
        panel_top = top + sum(heights[:line]) + (lines[line] + 1.6) * LINE
        _draw_stroke(measurement, rows, figure, (LEFT + column * (width + GAP), panel_top, width))
    if shown:
        _draw_key(figure)
    else:
        _sentence(figure, "No whistlers found.")
    return figure


def plot_stroke(measurement: Measurement, group: int) -> NotebookFigure:
    """Return the figure of one stroke: spectrogram with fits, and residuals.

    Parameters
    ----------
    measurement : Measurement
        Holds the stroke and a spectrogram of it.
    group : int
        Number of the stroke, as in its rows.

    Raises
    ------
    ValueError
        When there is no such stroke.
    """
    strokes = _strokes(measurement.rows)
    if group not in strokes:
        known = ", ".join(map(str, strokes)) or "none"
        raise ValueError(f"group={group} is not among the strokes found ({known}); choose another")
    rows = strokes[group]
    head = 0.1 + (len(rows) + 1.6) * LINE
    figure = _sheet(head + 1.3 * PANEL + AXIS + KEY)
    place = (LEFT, head, WIDTH - LEFT - RIGHT)
    _draw_stroke(measurement, rows, figure, place, height=1.3 * PANEL)
    _draw_key(figure)
    return figure


def plot_spectrogram(recording: Recording, settings: Settings | None = None) -> NotebookFigure:
    """Return the cleaned spectrogram of a recording, before anything is measured in it.

    Parameters
    ----------
    recording : Recording
        Opened recording.
    settings : Settings, optional
        Band, mains frequency; the defaults by default.
    """
    settings = settings or Settings()
    figure = _sheet(TITLE + 2.0 * STRIP + AXIS)
    ax = _axes(figure, LEFT, TITLE, WIDTH - LEFT - RIGHT - 0.6, 2.0 * STRIP)
    for block in recording.blocks(BLOCK_S):
        audio = clean(
            block.samples,
            block.usable,
            sample_rate_hz=float(recording.sample_rate_hz),
            start_s=block.first_frame / recording.sample_rate_hz,
            settings=settings,
        )
        image = draw_spectrogram(spectrogram(audio, band_low_hz=settings.band_low_hz), ax)
    ax.set_xlim(0.0, recording.duration_s)
    _scale(figure, image, TITLE, 2.0 * STRIP)
    _title(figure, recording, settings, _described(recording))
    return figure


def draw_overview(measurement: Measurement, ax: Axes) -> AxesImage:
    """Return the image of a whole recording, its traces drawn and its strokes numbered above.

    Parameters
    ----------
    measurement : Measurement
        At least one view.
    ax : matplotlib.axes.Axes
        Where to draw.
    """
    images = [draw_spectrogram(view, ax) for view in measurement.views]
    ax.set_xlim(0.0, measurement.recording.duration_s)
    strokes = _strokes(measurement.rows)
    for rows in strokes.values():
        for number, row in enumerate(rows):
            colour = path_style(number).colour
            ax.plot(row.trace.time_s, row.trace.frequency_hz / 1e3, color=colour, linewidth=1.0)
        draw_sferic(rows[0], ax)
    for at_s, text in _stroke_labels(strokes, measurement.recording.duration_s):
        ax.text(
            at_s,
            1.03,
            text,
            transform=ax.get_xaxis_transform(),
            ha="center",
            va="bottom",
            fontsize=TEXT_PT,
        )
    return images[-1]
