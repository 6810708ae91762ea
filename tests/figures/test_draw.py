"""What the drawing functions put on axes, read back from the artists."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.colors import to_rgb
from matplotlib.lines import Line2D

from fieldlines import FieldLineModel, travel_time
from whistler import figures
from whistler.figures.style import MAP
from whistler.rows import WhistlerRow
from whistler.spectrogram import Spectrogram

MakeRow = Callable[..., WhistlerRow]
MakeView = Callable[..., Spectrogram]
STYLE = figures.path_style(0)
BAND_HZ = (500.0, 10_000.0)
# Okabe and Ito's palette (2008), from memory.
OKABE_ITO = {
    "#000000", "#E69F00", "#56B4E9", "#009E73", "#F0E442", "#0072B2", "#D55E00", "#CC79A7",
}  # fmt: skip
SAME_S = 1e-9  # the same formula twice: rounding only


def expected_times(row: WhistlerRow, line: Line2D, model: FieldLineModel) -> np.ndarray:
    one_hop_s = travel_time(
        1e3 * np.asarray(line.get_ydata()),
        l_value=row.l_value,
        equatorial_density_m3=1e6 * row.equatorial_density_cm3,
        model=model,
    )
    return row.lightning_time_s + row.hops * one_hop_s


def grey(colour: str | tuple[float, ...]) -> float:
    """Luma of ITU-R BT.601, what a grey print makes of a colour (common practice)."""
    return float(np.dot(to_rgb(colour), (0.299, 0.587, 0.114)))


def test_spectrogram_shows_decibels_over_noise_on_labelled_axes(
    ax: Axes, make_view: MakeView
) -> None:
    """Identity: every pixel is 10 log10 of the power there."""
    view = make_view(2.0)
    image = figures.draw_spectrogram(view, ax)
    expected = [[10.0 * math.log10(value) for value in row[:5]] for row in view.power[:5]]
    # 1e-4 dB: single precision
    assert np.asarray(image.get_array())[:5, :5] == pytest.approx(np.array(expected), abs=1e-4)
    assert ax.get_xlabel() == "time from the first sample (s)"
    assert ax.get_ylabel() == "frequency (kHz)"
    left, right, bottom, top = image.get_extent()
    assert (bottom, top) == pytest.approx((0.45, 9.95))  # half a channel beyond 0.5 and 9.9 kHz
    assert (left, right) == pytest.approx((0.008, 2.008))  # half a hop before and after
    assert ax.get_xlim() == pytest.approx((0.01, 2.006))


def test_spectrogram_shows_only_the_stretch_asked_for(ax: Axes, make_view: MakeView) -> None:
    """Identity: the first column shown is that of its time."""
    view = make_view(12.0)
    image = figures.draw_spectrogram(view, ax, time_limits_s=(3.0, 4.0))
    assert ax.get_xlim() == (3.0, 4.0)
    left, right, *_ = image.get_extent()
    assert 2.99 < left < 3.0 < 4.0 < right < 4.02
    column = round((left + 0.002 - 0.01) / 0.004)
    first = 10.0 * np.log10(view.power[:, column])
    assert np.asarray(image.get_array())[:, 0] == pytest.approx(first, abs=1e-4)


def test_long_spectrograms_are_averaged_not_thinned(ax: Axes, make_view: MakeView) -> None:
    """Identity: a pixel is the mean power of the columns it stands for."""
    view = make_view(40.0)  # 10 000 columns
    image = figures.draw_spectrogram(view, ax)
    shown = np.asarray(image.get_array())
    factor = math.ceil(view.power.shape[1] / shown.shape[1])
    assert factor >= 2 and shown.shape[1] <= 3000
    mean = view.power[:, factor : 2 * factor].mean(axis=1)
    assert shown[:, 1] == pytest.approx(10.0 * np.log10(mean), abs=1e-3)  # single precision


def test_silence_is_drawn_without_warnings(ax: Axes) -> None:
    view = Spectrogram(np.zeros((3, 4), np.float32), np.array([500.0, 600, 700]), 0.0, 0.004, 0.02)
    assert np.isfinite(np.asarray(figures.draw_spectrogram(view, ax).get_array())).all()


def test_grey_scale_falls_from_noise_to_signal() -> None:
    lightness = [grey(colormaps[MAP](level)[:3]) for level in np.linspace(0.0, 1.0, 33)]
    assert all(a > b for a, b in itertools.pairwise(lightness))


def test_trace_points_are_the_rows(ax: Axes, make_row: MakeRow) -> None:
    row = make_row(residual_s=0.003)
    points = figures.draw_trace(row, ax, style=STYLE)
    assert np.array_equal(points.get_xdata(), row.trace.time_s)
    assert np.array_equal(1e3 * np.asarray(points.get_ydata()), row.trace.frequency_hz)
    assert points.get_linestyle() == "None" and points.get_marker() == STYLE.marker
    assert points.get_label() == "1 hop: L 2.800 ± 0.004 (± 0.04), n 1000 ± 12 (± 230) cm⁻³"


@pytest.mark.parametrize("hops", [1, 2, 5])
def test_curve_is_the_model_solid_where_traced_dashed_beyond(
    ax: Axes, make_row: MakeRow, model: FieldLineModel, hops: int
) -> None:
    """Identity: lightning time plus hops times the travel time, from fieldlines directly."""
    row = make_row(hops=hops)
    solid, below, above = figures.draw_curve(row, ax, model=model, style=STYLE, band_hz=BAND_HZ)
    for line, low_khz, high_khz in ((solid, 2.0, 6.0), (below, 0.5, 2.0), (above, 6.0, 10.0)):
        frequency_khz = np.asarray(line.get_ydata())
        assert (frequency_khz[0], frequency_khz[-1]) == pytest.approx((low_khz, high_khz))
        assert np.asarray(line.get_xdata()) == pytest.approx(
            expected_times(row, line, model), abs=SAME_S
        )
    assert not solid.is_dashed()
    assert below.is_dashed() and above.is_dashed()


def test_curve_of_a_fitted_profile_is_that_of_its_own_model(
    ax: Axes, make_row: MakeRow, model: FieldLineModel
) -> None:
    """Identity: exponent and foF2 of the row, from fieldlines directly; the default one is off."""
    assert model.layer is not None
    layer = replace(model.layer, critical_frequency_hz=6e6)
    own = replace(model, density_exponent=2.0, layer=layer)
    row = make_row(density_exponent=2.0, fo_f2_mhz=6.0)
    solid, *_ = figures.draw_curve(row, ax, model=model, style=STYLE, band_hz=BAND_HZ)
    drawn_s = np.asarray(solid.get_xdata())
    assert drawn_s == pytest.approx(expected_times(row, solid, own), abs=SAME_S)
    assert np.abs(drawn_s - expected_times(row, solid, model)).min() > 0.01


def test_curve_ends_at_half_the_equatorial_gyrofrequency(
    ax: Axes, make_row: MakeRow, model: FieldLineModel
) -> None:
    """Identity: no duct guides beyond; the dipole field at L 4.4 written out here."""
    row = make_row(l_value=4.4, density_cm3=330.0, frequency_hz=(1500.0, 2500.0, 3500.0))
    *_, above = figures.draw_curve(row, ax, model=model, style=STYLE, band_hz=BAND_HZ)
    # 28 GHz/T times 29.7 uT / L^3, both from memory to 1 %
    half_hz = 0.5 * 28.0e9 * 29.7e-6 / 4.4**3
    assert 1e3 * np.asarray(above.get_ydata())[-1] == pytest.approx(half_hz, rel=0.01)


@pytest.mark.parametrize("status", ["undetermined", "at-bound"])
def test_no_curve_residual_or_nose_without_l(
    ax: Axes, make_row: MakeRow, model: FieldLineModel, status: str
) -> None:
    unknown = dict.fromkeys(("l_value", "nose_frequency_hz", "nose_time_s"), math.nan)
    row = replace(make_row(uncertainty_status=status), **unknown)
    assert figures.draw_curve(row, ax, model=model, style=STYLE, band_hz=BAND_HZ) == []
    assert figures.draw_residuals(row, ax, model=model, style=STYLE) is None
    assert figures.draw_nose(row, ax, style=STYLE) is None
    assert len(figures.draw_trace(row, ax, style=STYLE).get_xdata()) == 5


def test_sferic_is_filled_when_seen_and_hollow_with_error_bar_when_predicted(
    ax: Axes, make_row: MakeRow
) -> None:
    seen = figures.draw_sferic(make_row(), ax)
    predicted = figures.draw_sferic(make_row(sferic_seen=False, sferic_time_sd_s=0.03), ax)
    for artists in (seen, predicted):
        assert artists[0].get_xdata() == pytest.approx([2.04])
    assert seen[0].get_markerfacecolor() == "black"
    assert predicted[0].get_markerfacecolor() == "white"
    assert len(seen) == 2
    assert predicted[2].get_xdata() == pytest.approx([2.01, 2.07])
    assert figures.draw_sferic(make_row(sferic_time_s=math.nan), ax) == []


def test_nose_is_marked_only_inside_the_view(ax: Axes, make_row: MakeRow) -> None:
    """Identity: at lightning plus hops times the delay of the nose."""
    row = make_row(hops=3, nose_frequency_hz=7000.0, nose_time_s=1.25)
    ax.set(xlim=(2.0, 8.0), ylim=(0.5, 10.0))
    mark = figures.draw_nose(row, ax, style=STYLE)
    assert mark is not None
    assert (*mark.get_xdata(), *mark.get_ydata()) == pytest.approx((5.75, 7.0))
    ax.set_ylim(0.5, 6.5)
    assert figures.draw_nose(row, ax, style=STYLE) is None
    ax.set(xlim=(2.0, 5.0), ylim=(0.5, 10.0))
    assert figures.draw_nose(row, ax, style=STYLE) is None


@pytest.mark.parametrize("hops", [1, 3])
def test_residuals_are_trace_minus_model_with_one_sigma(
    ax: Axes, make_row: MakeRow, model: FieldLineModel, hops: int
) -> None:
    """Identity: the trace was made 2.5 ms late, with a sigma of 0.4 ms."""
    row = make_row(hops=hops, residual_s=0.0025, sd_s=0.0004)
    bars = figures.draw_residuals(row, ax, model=model, style=STYLE)
    assert bars is not None
    points, _, (lines,) = bars.lines
    assert points.get_xdata() == pytest.approx(np.full(5, 2.5), abs=1e3 * SAME_S)
    assert points.get_ydata() == pytest.approx(row.trace.frequency_hz / 1e3)
    for segment in lines.get_segments():
        assert segment[:, 0] == pytest.approx([2.1, 2.9], abs=1e3 * SAME_S)


def test_residual_panel_is_centred_and_tells_rows_apart(
    ax: Axes, make_row: MakeRow, model: FieldLineModel
) -> None:
    rows = [make_row(residual_s=-0.004), make_row(l_value=3.2), make_row(l_value=3.6)]
    bars = figures.draw_residual_panel(rows, ax, model=model)
    assert ax.get_xlabel() == "trace − model (ms)"
    assert ax.get_ylabel() == "frequency (kHz)"
    low, high = ax.get_xlim()
    assert low == -high and 4.4 < high < 5.0
    markers = {bar.lines[0].get_marker() for bar in bars}
    colours = {bar.lines[0].get_color() for bar in bars}
    assert len(markers) == len(colours) == 3


def test_small_residuals_are_not_blown_up(
    ax: Axes, make_row: MakeRow, model: FieldLineModel
) -> None:
    figures.draw_residual_panel([make_row(sd_s=1e-5)], ax, model=model)
    assert ax.get_xlim()[1] >= 1.0


def test_time_line_shows_both_sigmas_by_hops(ax: Axes, make_row: MakeRow) -> None:
    """Identity: total sigma sqrt(3^2 + 4^2) = 5 in units of 0.01."""
    rows = [
        make_row(1, sferic_time_s=600.0, l_value_sd=0.03, l_value_profile_sd=0.04),
        make_row(2, sferic_time_s=1200.0, hops=2, l_value=3.0),
        make_row(3, sferic_time_s=1800.0, l_value_sd=math.nan),
    ]
    bars = figures.draw_time_line(rows, ax)
    total, given = bars[0], bars[1]
    assert given.lines[0].get_xdata() == pytest.approx([10.0, 30.0])  # minutes
    assert given.lines[0].get_ydata() == pytest.approx([2.8, 2.8])
    assert total.lines[2][0].get_segments()[0][:, 1] == pytest.approx([2.75, 2.85])
    assert given.lines[2][0].get_segments()[0][:, 1] == pytest.approx([2.77, 2.83])
    assert [text.get_text() for text in ax.legend().get_texts()] == ["1 hop", "2 hops"]
    density = figures.draw_time_line(rows, ax, quantity="equatorial_density_cm3")
    assert density[1].lines[0].get_ydata() == pytest.approx([1000.0, 1000.0])


def test_time_line_leaves_out_what_is_undetermined(ax: Axes, make_row: MakeRow) -> None:
    assert figures.draw_time_line([replace(make_row(), l_value=math.nan)], ax) == []


def test_styles_are_safe_for_the_colour_blind_and_for_grey_print() -> None:
    """Reference: Okabe and Ito (2008), from memory; lightness by ITU-R BT.601."""
    styles = [figures.path_style(number) for number in range(56)]
    assert {style.colour for style in styles} < OKABE_ITO
    assert len({(style.colour, style.marker) for style in styles}) == 56
    for one, other in itertools.pairwise(styles):
        assert one.marker != other.marker and one.dashes != other.dashes
        # eight-bit grey levels told apart side by side on paper (common practice: a twentieth)
        assert abs(grey(one.colour) - grey(other.colour)) > 0.05


@pytest.mark.parametrize(
    ("changes", "label"),
    [
        ({"hops": 3, "l_value_sd": 0.0004}, "3 hops: L 2.8000 ± 0.0004 (± 0.04), n 1000 ± 12"),
        ({"l_value_profile_sd": 0.0042}, "1 hop: L 2.800 ± 0.004 (± 0.004), n 1000 ± 12"),
        (
            {"flags": ("density-prior", "echo", "profile-fitted")},
            "1 hop: L 2.800 ± 0.004 (± 0.04), n 1000 ± 12 (± 230) cm⁻³, density prior, "
            "profile fitted",
        ),
        ({"equatorial_density_sd_cm3": 0.31}, "1 hop: L 2.800 ± 0.004 (± 0.04), n 1000.0 ± 0.3"),
        ({"uncertainty_status": "prior-dominated"}, "1 hop: L 2.80, n 1000 cm⁻³, led by the prior"),
        ({"uncertainty_status": "undetermined"}, "1 hop: L 2.80, n 1000 cm⁻³, undetermined"),
    ],
)
def test_labels_show_the_first_digit_of_the_sigma(
    make_row: MakeRow, changes: dict[str, object], label: str
) -> None:
    assert figures.row_label(make_row(**changes)).startswith(label)
