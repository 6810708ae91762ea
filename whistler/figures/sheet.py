"""The sheet that figures are laid out on, in inches from its upper left corner."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING, NamedTuple

from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from whistler.figures.style import TEXT_PT, TITLE_PT

if TYPE_CHECKING:
    from matplotlib.axes import Axes

SAVED_DPI = 120
SHOWN_DPI = 80  # in a notebook
WIDTH_IN = 12.0
LEFT_IN = 0.65
RIGHT_IN = 0.25
TITLE_IN = 0.78  # two lines, and the numbers above the strip
NEUTRAL = "0.2"
AXIS_IN = 0.52  # ticks and label below axes
KEY_IN = 0.60


class Box(NamedTuple):
    """A rectangle on the sheet."""

    left_in: float
    top_in: float
    width_in: float
    height_in: float


class NotebookFigure(Figure):
    """A figure that notebooks show by itself, once, whatever their backend."""

    def _repr_png_(self) -> bytes:
        return png_bytes(self, dpi=SHOWN_DPI)


def png_bytes(figure: Figure, *, dpi: int = SAVED_DPI) -> bytes:
    """Return a figure as PNG; the same figure gives the same bytes."""
    content = io.BytesIO()
    figure.savefig(content, format="png", dpi=dpi, metadata={"Software": None})
    return content.getvalue()


def new_sheet(height_in: float) -> NotebookFigure:
    """Return an empty white sheet of the common width."""
    return NotebookFigure(figsize=(WIDTH_IN, height_in), dpi=SHOWN_DPI, facecolor="white")


def place(figure: Figure, box: Box) -> Axes:
    """Return new axes in a rectangle."""
    width_in, height_in = figure.get_size_inches()
    bottom_in = height_in - box.top_in - box.height_in
    return figure.add_axes(
        (
            box.left_in / width_in,
            bottom_in / height_in,
            box.width_in / width_in,
            box.height_in / height_in,
        )
    )


def write_title(figure: Figure, title: str, *, below: str) -> None:
    """Write the title line and a smaller one below it; neither is read as mathematics."""
    width_in, height_in = figure.get_size_inches()
    for text, from_top_in, size_pt, weight in (
        (title, 0.10, TITLE_PT, "bold"),
        (below, 0.32, TEXT_PT, "normal"),
    ):
        figure.text(
            LEFT_IN / width_in,
            1.0 - from_top_in / height_in,
            text,
            fontsize=size_pt,
            fontweight=weight,
            va="top",
            parse_math=False,
        )


def write_sentence(figure: Figure, text: str, *, from_bottom_in: float = 0.12) -> None:
    """Write one sentence at the foot of the sheet."""
    width_in, height_in = figure.get_size_inches()
    figure.text(
        LEFT_IN / width_in,
        from_bottom_in / height_in,
        text,
        fontsize=TEXT_PT,
        va="bottom",
        parse_math=False,
    )


def write_key(figure: Figure, sentence: str) -> None:
    """Explain the marks at the foot of the sheet, in the neutral colour, and add a sentence."""
    handles = {
        "trace": _mark("o", 6.0),
        "fitted curve, traced band": Line2D([], [], color=NEUTRAL),
        "beyond it": Line2D([], [], color=NEUTRAL, dashes=(4.0, 2.0)),
        "nose": _mark("*", 11.0),
        "sferic, identified": _mark("v", 7.0),
        "sferic, predicted": _mark("v", 7.0, face="white"),
    }
    width_in, height_in = figure.get_size_inches()
    figure.legend(
        list(handles.values()),
        list(handles),
        loc="lower left",
        bbox_to_anchor=(LEFT_IN / width_in, 0.30 / height_in),
        ncols=len(handles),
        frameon=False,
        borderpad=0.0,
        borderaxespad=0.0,
        fontsize=TEXT_PT,
    )
    write_sentence(figure, sentence)


def _mark(marker: str, size_pt: float, *, face: str = NEUTRAL) -> Line2D:
    return Line2D(
        [],
        [],
        linestyle="none",
        marker=marker,
        markersize=size_pt,
        color=NEUTRAL,
        markerfacecolor=face,
    )
