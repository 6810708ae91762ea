"""The share of injected whistlers that is found: against strength, by L, by hour."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from whistler.figures.sheet import LEFT_IN, WIDTH_IN, Box, new_sheet, place, png_bytes, write_title
from whistler.figures.style import TEXT_PT, path_style, shown_name
from whistler.proportions import Crossing, Share, ShareCurves

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

HEIGHT_IN = 4.4
TOP_IN = 0.62
PANEL_IN = 3.2
GAP_IN = 0.45
FIRST_SHARE = 0.5  # of the width, for the panel of strengths
GRID = "0.88"
WORDS = "bars: 95 % intervals; L and hour: over all strengths injected"


def draw_shares(
    bins: Sequence[Share], ax: Axes, *, number: int = 0, shift: float = 0.0, label: str = ""
) -> None:
    """Draw the share of every bin with its interval.

    Parameters
    ----------
    bins : sequence of Share
        Empty ones are left out.
    ax : matplotlib.axes.Axes
        Where to draw.
    number : int
        Which of the common colours and markers.
    shift : float
        How far right of its bin's middle a point stands, in widths of the bin.
    label : str
        For the legend.
    """
    filled = [item for item in bins if item.tried]
    style = path_style(number)
    middle = [0.5 * (item.low + item.high) + shift * (item.high - item.low) for item in filled]
    share = np.array([100.0 * item.share for item in filled])
    low = share - [100.0 * item.interval.low for item in filled]
    high = np.array([100.0 * item.interval.high for item in filled]) - share
    ax.errorbar(
        middle,
        share,
        yerr=[low, high],
        fmt=style.marker,
        markersize=5.0,
        color=style.colour,
        elinewidth=1.0,
        label=label,
    )


def draw_crossings(crossings: Sequence[Crossing], ax: Axes, *, number: int = 0) -> None:
    """Mark where shares are reached, those that are, with their intervals; lines to both axes.

    Parameters
    ----------
    crossings : sequence of Crossing
        Those outside the strengths tried are left out.
    ax : matplotlib.axes.Axes
        Where to draw.
    number : int
        Which of the common colours.
    """
    style = path_style(number)
    for item in crossings:
        if not np.isfinite(item.strength_db):
            continue
        at = 100.0 * item.share
        ax.plot([item.strength_db] * 2, [0.0, at], color=style.colour, linewidth=0.9, dashes=(4, 2))
        ends = [item.interval_db.low, item.interval_db.high]
        if np.isfinite(ends).all():
            ax.plot(ends, [at, at], color=style.colour, linewidth=3.0, alpha=0.4)
        ax.annotate(
            f"{at:.0f} %: {item.strength_db:.1f} dB",
            (item.strength_db, 0.0),
            xytext=(2.0, 4.0),
            textcoords="offset points",
            rotation=90.0,
            fontsize=TEXT_PT,
            color=style.colour,
        )


def plot_shares(curves: ShareCurves, *, title: str) -> Figure:
    """Return the sheet of all shares.

    Parameters
    ----------
    curves : ShareCurves
        What to draw; the panel by hour is left out when no hour is known.
    title : str
        The title line.
    """
    figure = new_sheet(HEIGHT_IN)
    write_title(figure, shown_name(title, most=120), below=WORDS)
    strength, *others = _panels(figure, with_hours=bool(curves.by_hour))
    draw_shares(curves.thin, strength, number=0, label="thin traces")
    draw_shares(curves.diffuse, strength, number=2, shift=0.06, label="diffuse traces")
    draw_crossings(curves.thin_crossings, strength, number=0)
    draw_crossings(curves.diffuse_crossings, strength, number=2)
    strength.set_xlim(curves.thin[0].low, curves.thin[-1].high)
    strength.set_xlabel("strength, dB (power over noise in a 21.3 ms cell)", fontsize=TEXT_PT)
    strength.set_ylabel("share found, %", fontsize=TEXT_PT)
    strength.legend(
        loc="lower right",
        bbox_to_anchor=(1.0, 1.0),  # above the panel: bars may stand anywhere in it
        ncols=2,
        borderaxespad=0.3,
        borderpad=0.0,
        columnspacing=0.8,
        handlelength=1.2,
        handletextpad=0.4,
        fontsize=TEXT_PT,
        frameon=False,
    )
    draw_shares(curves.by_l, others[0], number=4)
    others[0].set_xlim(curves.by_l[0].low, curves.by_l[-1].high)
    others[0].set_xlabel("L", fontsize=TEXT_PT)
    if curves.by_hour:
        draw_shares(curves.by_hour, others[1], number=4)
        others[1].set_xlim(0.0, 24.0)
        others[1].set_xticks(np.arange(0, 25, 6))
        others[1].set_xlabel("hour of the day, UTC", fontsize=TEXT_PT)
    return figure


def shares_png(figure: Figure) -> bytes:
    """Return the sheet as PNG; the same sheet gives the same bytes."""
    return png_bytes(figure)


def _panels(figure: Figure, *, with_hours: bool) -> list[Axes]:
    """Return axes beside one another on a common scale, the first the widest."""
    whole_in = WIDTH_IN - LEFT_IN - 0.3
    rest = 2 if with_hours else 1
    first_in = FIRST_SHARE * whole_in
    other_in = (whole_in - first_in - rest * GAP_IN) / rest
    boxes = [Box(LEFT_IN, TOP_IN, first_in, PANEL_IN)]
    for number in range(rest):
        left_in = LEFT_IN + first_in + GAP_IN + number * (other_in + GAP_IN)
        boxes.append(Box(left_in, TOP_IN, other_in, PANEL_IN))
    panels = [place(figure, box) for box in boxes]
    for ax in panels:
        ax.set_ylim(-5.0, 105.0)
        ax.set_yticks(np.arange(0, 101, 10))
        ax.grid(axis="y", color=GRID, linewidth=0.6)
        ax.set_axisbelow(True)
        ax.tick_params(labelsize=TEXT_PT)
    return panels
