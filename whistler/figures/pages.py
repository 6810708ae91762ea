"""Whole figures: a recording, one stroke of it, its spectrogram alone."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from pathlib import Path, PurePath
from typing import TYPE_CHECKING

from matplotlib.lines import Line2D
from matplotlib.ticker import LogLocator, NullFormatter, StrMethodFormatter

from whistler.cleaning import clean
from whistler.clock import iso_time
from whistler.figures.draw import (
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
from whistler.figures.sheet import (
    AXIS_IN,
    KEY_IN,
    LEFT_IN,
    RIGHT_IN,
    TITLE_IN,
    WIDTH_IN,
    Box,
    NotebookFigure,
    new_sheet,
    place,
    png_bytes,
    write_key,
    write_sentence,
    write_title,
)
from whistler.figures.strip import (
    STRIP_WIDTH_IN,
    begin_s,
    draw_overview,
    draw_scale,
    draw_views,
    strokes_of,
)
from whistler.figures.style import (
    TEXT_PT,
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
    from matplotlib.figure import Figure

    from whistler.measure import Measurement
    from whistler.recording import Recording
    from whistler.rows import WhistlerRow
    from whistler.spectrogram import Spectrogram

MOST_PANELS = 12
WIDE_UP_TO = 2  # strokes that get the full width
LEAD_S = 0.1  # shown before the stroke
TAIL = 0.12  # shown after the last point, as a share of what is before it
BLOCK_S = 120.0
MINUTE_S = 60.0
HOUR_S = 3600.0
STRIP_IN = 1.5
PANEL_IN = 2.2
RESIDUALS_IN = 1.3
BETWEEN_IN = 0.12
GAP_IN = 0.75  # between columns, for the labels of the right one
LINE_IN = 0.165
FOOTNOTE = (
    "L: path. n: equatorial electron density. ±: one-sigma given the model; "
    "(±): from not knowing density profile, ionosphere and place of the stroke."
)


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
    write_whole(Path(path), png_bytes(plot_recording(measurement)))


def plot_recording(measurement: Measurement) -> NotebookFigure:
    """Return the figure of a recording: all of it in a strip, then each stroke enlarged.

    Parameters
    ----------
    measurement : Measurement
        What was measured. Of more than twelve strokes the strongest are enlarged. Without a
        spectrogram, as of long recordings, L and density against time are shown instead.

    Returns
    -------
    NotebookFigure
        A matplotlib figure.
    """
    strokes = strokes_of(measurement.rows)
    if strokes and not measurement.views:
        return _time_line_page(measurement)
    shown = _strongest(strokes)
    columns = 1 if len(shown) <= WIDE_UP_TO else 2
    heads = [
        _head_in(max(map(len, shown[first : first + columns])))
        for first in range(0, len(shown), columns)
    ]
    strip_in = (STRIP_IN if shown else 2.0 * STRIP_IN) if measurement.views else 0.0
    top_in = TITLE_IN + strip_in + AXIS_IN
    foot_in = KEY_IN if shown else 0.35
    figure = new_sheet(top_in + sum(heads) + len(heads) * (PANEL_IN + AXIS_IN) + foot_in)
    _head(figure, measurement.recording, measurement.settings, below=_found(strokes, shown))
    if measurement.views:
        box = Box(LEFT_IN, TITLE_IN, STRIP_WIDTH_IN, strip_in)
        draw_scale(figure, draw_overview(measurement, place(figure, box)), box=box)
    width_in = (WIDTH_IN - LEFT_IN - RIGHT_IN - (columns - 1) * GAP_IN) / columns
    for number, rows in enumerate(shown):
        line, column = divmod(number, columns)
        above_in = sum(heads[: line + 1]) + line * (PANEL_IN + AXIS_IN)
        left_in = LEFT_IN + column * (width_in + GAP_IN)
        _draw_stroke(
            figure, Box(left_in, top_in + above_in, width_in, PANEL_IN), measurement, rows=rows
        )
    if shown:
        write_key(figure, FOOTNOTE)
    else:
        write_sentence(figure, "No whistlers found.")
    return figure


def plot_stroke(measurement: Measurement, group: int) -> NotebookFigure:
    """Return the figure of one stroke: spectrogram with fitted curves, and residuals.

    Parameters
    ----------
    measurement : Measurement
        Holds the stroke.
    group : int
        Number of the stroke, as in its rows.

    Raises
    ------
    ValueError
        When there is no such stroke.
    """
    strokes = strokes_of(measurement.rows)
    if group not in strokes:
        known = ", ".join(map(str, strokes)) or "none"
        raise ValueError(f"group={group} is not among the strokes found ({known}); choose another")
    rows = strokes[group]
    top_in = 0.1 + _head_in(len(rows))
    height_in = 1.4 * PANEL_IN
    figure = new_sheet(top_in + height_in + AXIS_IN + KEY_IN)
    box = Box(LEFT_IN, top_in, WIDTH_IN - LEFT_IN - RIGHT_IN, height_in)
    _draw_stroke(figure, box, measurement, rows=rows)
    write_key(figure, FOOTNOTE)
    return figure


def plot_spectrogram(recording: Recording, settings: Settings | None = None) -> NotebookFigure:
    """Return the cleaned spectrogram of a recording, before anything is measured in it.

    Parameters
    ----------
    recording : Recording
        Opened recording.
    settings : Settings, optional
        Band and mains frequency; the defaults if left out.
    """
    settings = settings or Settings()
    height_in = 2.0 * STRIP_IN
    figure = new_sheet(TITLE_IN + height_in + AXIS_IN)
    box = Box(LEFT_IN, TITLE_IN, STRIP_WIDTH_IN, height_in)
    views = _views(recording, settings)
    image = draw_views(views, place(figure, box), duration_s=recording.duration_s)
    draw_scale(figure, image, box=box)
    _head(figure, recording, settings, below="before the search")
    return figure


def _strongest(strokes: dict[int, list[WhistlerRow]]) -> list[list[WhistlerRow]]:
    """Rows of the strokes to enlarge, in the order of the catalogue."""

    def strength_db(group: int) -> float:
        return max((row.snr_db for row in strokes[group] if math.isfinite(row.snr_db)), default=0.0)

    chosen = sorted(strokes, key=strength_db, reverse=True)[:MOST_PANELS]
    return [rows for group, rows in strokes.items() if group in chosen]


def _window_s(rows: Sequence[WhistlerRow]) -> tuple[float, float]:
    """The stretch of time that shows a stroke and all its traces."""
    ends = [float(row.trace.time_s.max()) for row in rows if len(row.trace.time_s)]
    first_s = begin_s(rows)
    sd_s = rows[0].sferic_time_sd_s
    if not rows[0].sferic_seen and math.isfinite(sd_s):
        first_s -= sd_s
    last_s = max([*ends, first_s + LEAD_S])
    return first_s - LEAD_S, last_s + TAIL * (last_s - first_s)


def _head_in(rows: int) -> float:
    """Height above a panel for its heading and a line a row."""
    return (rows + 1.5) * LINE_IN


def _draw_stroke(
    figure: Figure, box: Box, measurement: Measurement, *, rows: Sequence[WhistlerRow]
) -> None:
    """Draw one stroke's spectrogram with fits and, right of it, the residuals on the same axis."""
    narrower_in = box.width_in - RESIDUALS_IN - BETWEEN_IN
    ax = place(figure, box._replace(width_in=narrower_in))
    window_s = _window_s(rows)
    for view in measurement.views:
        if view.time_s[0] < window_s[1] and window_s[0] < view.time_s[-1]:
            draw_spectrogram(view, ax, time_limits_s=window_s)
    band_hz = (measurement.settings.band_low_hz, measurement.settings.band_high_hz)
    ax.set_xlim(window_s)
    for number, row in enumerate(rows):
        style = path_style(number)
        draw_curve(row, ax, model=measurement.model, style=style, band_hz=band_hz)
        draw_trace(row, ax, style=style)
        draw_nose(row, ax, style=style)
    draw_sferic(rows[0], ax)
    _write_rows(ax, rows)
    residuals = place(
        figure,
        box._replace(left_in=box.left_in + narrower_in + BETWEEN_IN, width_in=RESIDUALS_IN),
    )
    draw_residual_panel(rows, residuals, model=measurement.model)
    residuals.set_ylim(ax.get_ylim())
    residuals.set_ylabel("")
    residuals.tick_params(labelleft=False)


def _write_rows(ax: Axes, rows: Sequence[WhistlerRow]) -> None:
    """Write the heading of a stroke and one line a row above its panel."""
    handles = []
    for number, row in enumerate(rows):
        style = path_style(number)
        handle = Line2D([], [], color=style.colour, marker=style.marker)
        if not has_model(row):
            handle.set_linestyle("none")
        handles.append(handle)
    ax.legend(
        handles,
        [row_label(row) for row in rows],
        title=stroke_heading(rows[0]),
        alignment="left",
        loc="lower left",
        bbox_to_anchor=(0.0, 1.0),
        frameon=False,
        borderpad=0.0,
        borderaxespad=0.3,
        labelspacing=0.15,
        markerscale=0.8,
        fontsize=TEXT_PT,
        title_fontproperties={"size": TEXT_PT, "weight": "bold"},
    )


def _views(recording: Recording, settings: Settings) -> Iterable[Spectrogram]:
    for block in recording.blocks(BLOCK_S):
        yield spectrogram(clean(block, settings=settings), band_low_hz=settings.band_low_hz)


def _head(figure: Figure, recording: Recording, settings: Settings, *, below: str) -> None:
    """Write what the figure is of: name, date and station, then size and count."""
    began = iso_time(recording.start_time)
    parts = [
        shown_name(PurePath(recording.path).name),
        f"{began[:10]} {began[11:19]} UTC" if began else "date unknown",
    ]
    if settings.station.name:
        parts.append(f"station {shown_name(settings.station.name, most=40)}")
    size = f"{recording.duration_s:.1f} s at {recording.sample_rate_hz} Hz"
    if recording.channels > 1:
        size += f", channel {recording.channel} of {recording.channels}"
    write_title(figure, "   ".join(parts), below=f"{size}; {below}")


def _found(
    strokes: dict[int, list[WhistlerRow]], shown: Sequence[Sequence[WhistlerRow]] = ()
) -> str:
    """Say how much was found, and whether all of it is enlarged."""
    if not strokes:
        return "no whistlers found"
    traces = sum(len(rows) for rows in strokes.values())
    text = f"{_counted(traces, 'trace')} of {_counted(len(strokes), 'stroke')}"
    if 0 < len(shown) < len(strokes):
        text += f", the {len(shown)} strongest enlarged"
    return text


def _counted(number: int, word: str) -> str:
    return f"{number} {word}{'' if number == 1 else 's'}"


def _time_line_page(measurement: Measurement) -> NotebookFigure:
    """L and density against time, for recordings of which no spectrogram is kept."""
    rows, recording = measurement.rows, measurement.recording
    unit_s, unit = (HOUR_S, "h") if recording.duration_s > 2.0 * HOUR_S else (MINUTE_S, "min")
    figure = new_sheet(TITLE_IN + 2.0 * (PANEL_IN + AXIS_IN) + KEY_IN)
    _head(figure, recording, measurement.settings, below=_found(strokes_of(rows)))
    width_in = WIDTH_IN - LEFT_IN - RIGHT_IN
    for number, (quantity, label) in enumerate(
        (("l_value", "L"), ("equatorial_density_cm3", "equatorial density (cm⁻³)"))
    ):
        top_in = TITLE_IN + number * (PANEL_IN + AXIS_IN)
        ax = place(figure, Box(LEFT_IN, top_in, width_in, PANEL_IN))
        bars = draw_time_line(rows, ax, quantity=quantity, time_unit_s=unit_s)
        if number == 1 and bars:
            _logarithmic(ax)
        ax.set_xlim(0.0, recording.duration_s / unit_s)
        label_axes(ax, f"time from the first sample ({unit})", label)
        if number == 0 and bars:
            ax.legend(
                loc="lower right",
                bbox_to_anchor=(1.0, 1.0),
                ncols=8,
                frameon=False,
                fontsize=TEXT_PT,
            )
    left_out = sum(not math.isfinite(row.l_value) for row in rows)
    more = f" {_counted(left_out, 'trace')} without L left out." if left_out else ""
    write_sentence(figure, FOOTNOTE, from_bottom_in=0.3)
    write_sentence(figure, f"Thick bar: ±; thin bar: both.{more} Too long for a spectrogram.")
    return figure


def _logarithmic(ax: Axes) -> None:
    """Make the upright axis logarithmic, with plain numbers at 1, 2 and 5."""
    ax.set_yscale("log")
    ax.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
    ax.yaxis.set_major_formatter(StrMethodFormatter("{x:g}"))
    ax.yaxis.set_minor_formatter(NullFormatter())
