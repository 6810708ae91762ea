"""Figures of measurements: functions that draw onto axes, and whole pages made of them.

No function touches the global state of matplotlib; pages are :class:`matplotlib.figure.Figure`
objects that notebooks show and :func:`save_recording_figure` writes.
"""

from __future__ import annotations

from whistler.figures.draw import (
    draw_curve,
    draw_nose,
    draw_residual_panel,
    draw_residuals,
    draw_sferic,
    draw_spectrogram,
    draw_time_line,
    draw_trace,
)
from whistler.figures.pages import (
    plot_recording,
    plot_spectrogram,
    plot_stroke,
    save_recording_figure,
)
from whistler.figures.strip import draw_overview
from whistler.figures.style import PathStyle, path_style, row_label, shown_name

__all__ = [
    "PathStyle",
    "draw_curve",
    "draw_nose",
    "draw_overview",
    "draw_residual_panel",
    "draw_residuals",
    "draw_sferic",
    "draw_spectrogram",
    "draw_time_line",
    "draw_trace",
    "path_style",
    "plot_recording",
    "plot_spectrogram",
    "plot_stroke",
    "row_label",
    "save_recording_figure",
    "shown_name",
]
