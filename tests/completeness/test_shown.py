"""Figure and table of hand-made shares: what they say, not how they look."""

from __future__ import annotations

import itertools
import math

import pytest
from matplotlib.figure import Figure

from whistler.commands.completeness_table import completeness_text
from whistler.figures.shares import plot_shares, shares_png
from whistler.proportions import Crossing, Interval, Share, ShareCurves

NAN = math.nan


@pytest.fixture
def curves() -> ShareCurves:
    return ShareCurves(
        thin=(Share(0.0, 1.0, 40, 10), Share(1.0, 2.0, 0, 0), Share(2.0, 3.0, 40, 40)),
        diffuse=(Share(0.0, 3.0, 10, 5),),
        thin_crossings=(
            Crossing(0.5, 1.25, Interval(0.75, 1.5), "within"),
            Crossing(0.9, 2.0, Interval(1.5, NAN), "within"),
        ),
        diffuse_crossings=(Crossing(0.5, NAN, Interval(NAN, NAN), "above"),),
        by_l=(Share(2.0, 3.0, 50, 25), Share(3.0, 4.0, 40, 30)),
        by_hour=(Share(2.0, 3.0, 90, 55),),
    )


def points(figure: Figure, panel: int) -> list[tuple[float, float]]:
    lines = [container.lines[0] for container in figure.axes[panel].containers]
    return [(float(x), float(y)) for line in lines for x, y in zip(*line.get_data(), strict=True)]


def test_shares_stand_at_their_bins(curves: ShareCurves) -> None:
    figure = plot_shares(curves, title="made")
    assert points(figure, 0)[:2] == [(0.5, 25.0), (2.5, 100.0)]  # the empty bin is left out
    assert points(figure, 1) == [(2.5, 50.0), (3.5, 75.0)]
    assert points(figure, 2) == [(2.5, pytest.approx(100.0 * 55 / 90))]
    first = figure.axes[0]
    assert first.get_xlim() == (0.0, 3.0)
    assert first.get_xlabel() == "strength, dB (power over noise in a 21.3 ms cell)"
    assert [ax.get_xlabel() for ax in figure.axes[1:]] == ["L", "hour of the day, UTC"]
    assert [text.get_text() for text in first.texts] == ["50 %: 1.2 dB", "90 %: 2.0 dB"]
    (bars,) = first.containers[0].lines[2]
    ends = [segment[:, 1].tolist() for segment in bars.get_segments()]
    # Clopper and Pearson: 0.025 ** (1 / 40) for 40 of 40
    assert ends[1] == pytest.approx([100.0 * 0.025 ** (1.0 / 40.0), 100.0])


def test_the_legend_lies_off_the_data_and_markers_are_whole(curves: ShareCurves) -> None:
    figure = plot_shares(curves, title="made")
    figure.canvas.draw()
    first = figure.axes[0]
    legend = first.get_legend().get_window_extent()
    assert not legend.overlaps(first.get_window_extent())
    assert figure.bbox.ymax > legend.ymax
    (below,) = (text for text in figure.texts if text.get_text().startswith("bars"))
    assert not legend.overlaps(below.get_window_extent())
    marker_px = first.containers[0].lines[0].get_markersize() * figure.dpi / 72.0
    for ax in figure.axes:
        ends_px = ax.transData.transform([(0.0, 0.0), (0.0, 100.0)])[:, 1]
        frame = ax.get_window_extent()
        assert frame.ymin + marker_px / 2 < ends_px[0] < ends_px[1] < frame.ymax - marker_px / 2


def test_no_panel_of_hours_without_a_clock(curves: ShareCurves) -> None:
    undated = ShareCurves(**{**vars(curves), "by_hour": ()})
    assert len(plot_shares(undated, title="made").axes) == 2


def test_same_shares_give_the_same_picture(curves: ShareCurves) -> None:
    one, two = (shares_png(plot_shares(curves, title="made")) for _ in range(2))
    assert one == two
    assert one.startswith(b"\x89PNG")


def part(count: int, of: int) -> dict:
    return {
        "count": count,
        "of": of,
        "share": count / of if of else None,
        "interval": [0.1, 0.9] if of else [0.0, 1.0],
    }


def bins(*edges: float, injected: int = 1500) -> list[dict]:
    return [
        {
            "low": low,
            "high": high,
            "injected": injected,
            "found": injected,
            "share": 1.0,
            "interval": [0.975, 1.0],
        }
        for low, high in itertools.pairwise(edges)
    ]


def reached(
    where: str | None, *, share: float, at_db: float | None = None, interval_db: list | None = None
) -> dict:
    return {
        "share": share,
        "reached": where,
        "strength_db": at_db,
        "interval_db": interval_db or [None, None],
    }


def rate(count: int, live_s: float) -> dict:
    per_hour = 3600.0 * count / live_s if live_s else None
    ends = [1234.5, 0.25] if live_s else [None, None]
    return {
        "count": count,
        "live_time_s": live_s,
        "per_hour": per_hour,
        "interval_per_hour": ends,
    }


def wide_document(*, dated: bool) -> dict:
    pair = {"one_sigma": part(800, 1200), "1.96_sigma": part(1100, 1200)}
    return {
        "injected": 100_000,
        "recordings": [{}] * 1000,
        "request": {"snr_range_db": [-19.5, 39.5]},
        "own_rows": rate(1700, 36_000.0),
        "extra_rows": rate(0, 0.0),
        "false_alarms": rate(12, 60.0),
        "by_strength_thin": bins(-19.55, -18.55, -17.55, 38.75),
        "by_strength_diffuse": bins(-19.55, 39.55),
        "by_l": bins(2.225, 2.625),
        "by_hour": bins(2, 3) if dated else [],
        "strength_found": {
            "thin": [
                reached("within", share=0.5, at_db=1.25, interval_db=[None, 2.0]),
                reached("within", share=0.9, at_db=11.25, interval_db=[10.0, None]),
            ],
            "diffuse": [reached("below", share=0.5), reached("above", share=0.9)],
        },
        "timing": {"median_s": 0.0012, "percentile_90_s": 0.0299},
        "snr_excess_db": -0.5,
        "hops_right": part(1, 1),
        "sferic_identified": part(1, 1),
        "sferic_right": part(0, 0),
        "determined": part(1000, 1000),
        "coverage": {"l_value": pair, "equatorial_density_cm3": pair},
    }


@pytest.mark.parametrize("dated", [True, False])
def test_table_fits_the_terminal(dated: bool) -> None:
    text = completeness_text(wide_document(dated=dated))
    assert max(map(len, text.splitlines())) <= 80
    assert "50 % found at 1.2 dB (under -19.5 to 2.0)\n" in text
    assert "90 % found at 11.2 dB (10.0 to over 39.5)\n" in text
    assert "10.00 h of 1000 recordings" in text
    assert "e+" not in text
    assert ("02-03" in text) == dated


def test_a_share_outside_the_strengths_says_on_which_side() -> None:
    document = wide_document(dated=False)
    text = completeness_text(document)
    assert "50 % found below -19.5 dB already; inject weaker (--snr-range)\n" in text
    assert "90 % not reached up to 39.5 dB\n" in text
    document["strength_found"]["diffuse"] = [reached(None, share=0.5)]
    assert "50 %: too few injected to tell\n" in completeness_text(document)
