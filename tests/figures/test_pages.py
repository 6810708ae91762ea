"""Whole figures: what is on the page, that nothing overlaps, and that any name can be drawn."""

from __future__ import annotations

import itertools
import math
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.text import Text
from matplotlib.transforms import Bbox

import whistler
from whistler import figures
from whistler.errors import OutputError
from whistler.figures.strip import stroke_labels
from whistler.measure import Measurement
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.station import Station

MakeRow = Callable[..., WhistlerRow]
MakeMeasurement = Callable[..., Measurement]

SMALLEST_PT = 8.0
SAVED_DPI = 120


def texts(figure: Figure) -> Iterator[Text]:
    """Everything written on a figure; ticks outside the axes' limits are not drawn."""
    yield from figure.texts
    for legend in figure.legends:
        yield from legend.get_texts()
    for ax in figure.axes:
        yield from (ax.xaxis.label, ax.yaxis.label, *ax.texts)
        legend = ax.get_legend()
        if legend is not None:
            yield from (legend.get_title(), *legend.get_texts())
        for axis, limits in ((ax.xaxis, ax.get_xlim()), (ax.yaxis, ax.get_ylim())):
            low, high = sorted(limits)
            for tick in axis.get_major_ticks():
                if low <= tick.get_loc() <= high and tick.label1.get_visible():
                    yield tick.label1


def written(figure: Figure) -> list[str]:
    return [text.get_text() for text in texts(figure) if text.get_text()]


def boxes(figure: Figure) -> list[tuple[str, Bbox]]:
    """Each text with the pixels it covers at saved size."""
    figure.set_dpi(SAVED_DPI)
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    shown = [text for text in texts(figure) if text.get_text().strip()]
    return [(text.get_text(), text.get_window_extent(canvas.get_renderer())) for text in shown]


def assert_legible(figure: Figure) -> None:
    """No text smaller than 8 pt, over another, or off the sheet."""
    for text in texts(figure):
        assert not text.get_text() or text.get_fontsize() >= SMALLEST_PT, text.get_text()
    covered = boxes(figure)
    width, height = figure.get_size_inches() * SAVED_DPI
    for text, box in covered:
        inside = box.x0 >= 0.0 and box.y0 >= 0.0 and box.x1 <= width and box.y1 <= height
        assert inside, f"{text!r} leaves the sheet: {box}"
    for (one, a), (other, b) in itertools.combinations(covered, 2):
        assert not a.padded(-0.5).overlaps(b.padded(-0.5)), f"{one!r} lies over {other!r}"


def panels(figure: Figure) -> list[Axes]:
    """Spectrograms of single strokes: they alone have a legend with a title."""
    return [ax for ax in figure.axes if ax.get_legend() and ax.get_legend().get_title().get_text()]


def test_no_whistlers_leave_the_spectrogram_and_a_sentence(
    make_measurement: MakeMeasurement,
) -> None:
    figure = figures.plot_recording(make_measurement())
    assert "No whistlers found." in written(figure)
    assert len(figure.axes[0].get_images()) == 1
    assert panels(figure) == []
    assert_legible(figure)


def test_one_whistler_has_a_strip_a_panel_and_residuals(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    row = make_row(time="2025-03-14T02:00:02.040Z")
    figure = figures.plot_recording(make_measurement(row))
    strip = figure.axes[0]
    assert strip.get_xlim() == (0.0, 12.0)
    assert [text.get_text() for text in strip.texts] == ["1"]
    assert strip.texts[0].get_position()[0] == pytest.approx(2.04)
    (panel,) = panels(figure)
    assert panel.get_legend().get_title().get_text() == (
        "Stroke 1: sferic identified at 2.040 s (02:00:02.040 UTC)"
    )
    assert [text.get_text() for text in panel.get_legend().get_texts()] == [figures.row_label(row)]
    low_s, high_s = panel.get_xlim()
    assert low_s < 2.0 and high_s > row.trace.time_s.max()
    labels = {"time from the first sample (s)", "frequency (kHz)", "trace − model (ms)"}
    assert labels | {"power over noise (dB)", "nose", "sferic, predicted"} <= set(written(figure))
    residuals = next(ax for ax in figure.axes if ax.get_xlabel() == "trace − model (ms)")
    assert residuals.get_ylim() == panel.get_ylim()
    assert_legible(figure)


def test_a_predicted_sferic_shows_with_its_uncertainty(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    row = make_row(sferic_seen=False, sferic_time_sd_s=0.3, time=None)
    figure = figures.plot_recording(make_measurement(row))
    (panel,) = panels(figure)
    assert panel.get_xlim()[0] < 2.04 - 0.3
    assert "Stroke 1: sferic predicted at 2.040 ± 0.300 s" in written(figure)


def test_ten_rows_of_a_minute_are_each_legible(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    one = [make_row(1, l_value=l_value) for l_value in (2.4, 2.6, 2.8, 3.0)]
    train = [make_row(2, hops=hops, lightning_time_s=15.0) for hops in (1, 3, 5)]
    near = [make_row(3 + k, lightning_time_s=40.0 + 0.05 * k) for k in range(3)]
    figure = figures.plot_recording(make_measurement(*one, *train, *near, duration_s=60.0))
    assert [len(ax.get_legend().get_texts()) for ax in panels(figure)] == [4, 3, 1, 1, 1]
    assert [text.get_text() for text in figure.axes[0].texts] == ["1", "2", "3–5"]
    # a whistler of a second takes a quarter of the panel's width at least, but in echo trains
    for ax in panels(figure)[2:]:
        assert ax.get_xlim()[1] - ax.get_xlim()[0] < 4.0
    assert_legible(figure)


def test_a_stroke_of_many_paths_has_room_for_its_lines(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    rows = [make_row(group, lightning_time_s=2.0 * group) for group in (1, 2, 3, 4)]
    rows += [make_row(4, l_value=2.2 + 0.15 * k, lightning_time_s=8.0) for k in range(10)]
    figure = figures.plot_recording(make_measurement(*rows))
    assert len(panels(figure)[3].get_legend().get_texts()) == 11
    assert_legible(figure)


def test_of_many_strokes_the_strongest_are_enlarged(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    rows = [
        make_row(k, lightning_time_s=2.0 + 2.5 * k, snr_db=10.0 + (k * 7) % 20)
        for k in range(1, 21)
    ]
    figure = figures.plot_recording(make_measurement(*rows, duration_s=60.0))
    expected = sorted(row.group for row in sorted(rows, key=lambda row: -row.snr_db)[:12])
    titles = [ax.get_legend().get_title().get_text() for ax in panels(figure)]
    assert [int(title.split(":")[0].split()[1]) for title in titles] == expected
    assert "60.0 s at 24000 Hz; 20 traces of 20 strokes, the 12 strongest enlarged" in written(
        figure
    )
    assert_legible(figure)


def test_rows_without_l_and_without_points_are_drawn(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    bound = replace(
        make_row(1, uncertainty_status="at-bound"), l_value=math.nan, nose_frequency_hz=math.nan
    )
    bare = WhistlerRow("night.wav", 2)
    figure = figures.plot_recording(make_measurement(bound, bare))
    assert "1 hop: L and n not determined (fit at a bound)" in written(figure)
    assert "Stroke 2: sferic time undetermined" in written(figure)
    assert_legible(figure)


def test_long_recordings_show_l_and_density_against_time(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    rows = [make_row(k, sferic_time_s=300.0 * k, hops=1 + k % 3) for k in range(1, 12)]
    rows.append(replace(make_row(12), l_value=math.nan, equatorial_density_cm3=math.nan))
    figure = figures.plot_recording(make_measurement(*rows, duration_s=3600.0, with_views=False))
    upper, lower = figure.axes
    assert (upper.get_ylabel(), lower.get_ylabel()) == ("L", "equatorial density (cm⁻³)")
    for ax in (upper, lower):
        assert ax.get_xlabel() == "time from the first sample (min)"
        assert ax.get_xlim() == (0.0, 60.0)
    assert lower.get_yscale() == "log"
    assert any("1 trace without L left out" in text for text in written(figure))
    assert_legible(figure)


def test_very_long_recordings_count_hours(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    measurement = make_measurement(make_row(), duration_s=36_000.0, with_views=False)
    assert figures.plot_recording(measurement).axes[0].get_xlabel().endswith("(h)")


def test_nothing_at_all_is_said(make_measurement: MakeMeasurement) -> None:
    figure = figures.plot_recording(make_measurement(duration_s=3600.0, with_views=False))
    assert "No whistlers found." in written(figure)
    assert_legible(figure)


@pytest.mark.parametrize(
    ("name", "shown"),
    [
        ("night$x_$1.wav", "night$x_$1.wav"),
        ("a_b^c{d}%s\\frac.wav", "a_b^c{d}%s\\\\frac.wav"),
        ("bad\udcff.wav", "bad\\xff.wav"),
        ("new\nline\x1b[0m.wav", "new\\nline\\x1b[0m.wav"),
        ("\u5915\u65b9.wav", "\\u5915\\u65b9.wav"),  # the font has no such signs
        ("rtl\u202e.wav", "rtl\\u202e.wav"),
        ("<b>&amp;.wav", "<b>&amp;.wav"),
        ("n" * 250 + ".wav", "n" * 34 + "…" + "n" * 31 + ".wav"),
    ],
)
def test_any_name_can_be_drawn(
    make_measurement: MakeMeasurement, tmp_path: Path, name: str, shown: str
) -> None:
    """Warnings are errors here: a missing glyph would fail too."""
    settings = Settings(station=Station(name="Skarn$moor_$"))
    measurement = make_measurement(path=f"/data/{name}", settings=settings)
    figure = figures.plot_recording(measurement)
    title = figure.texts[0]
    assert title.get_text() == f"{shown}   2025-03-14 02:00:00 UTC   station Skarn$moor_$"
    assert not title.get_parse_math()
    figures.save_recording_figure(measurement, tmp_path / "figure.png")
    assert (tmp_path / "figure.png").stat().st_size > 10_000
    assert_legible(figure)


def test_unknown_date_and_chosen_channel_are_said(make_measurement: MakeMeasurement) -> None:
    measurement = make_measurement()
    recording = replace(measurement.recording, start_time=None, channels=2, channel=2)
    figure = figures.plot_recording(replace(measurement, recording=recording))
    assert written(figure)[0] == "night_20250314T020000Z.wav   date unknown"
    assert "12.0 s at 24000 Hz, channel 2 of 2; no whistlers found" in written(figure)


def test_file_is_png_of_the_stated_size_and_always_the_same(
    make_measurement: MakeMeasurement, make_row: MakeRow, tmp_path: Path
) -> None:
    measurement = make_measurement(make_row())
    for name in ("one.png", "two.png"):
        figures.save_recording_figure(measurement, tmp_path / name)
    one = (tmp_path / "one.png").read_bytes()
    assert one == (tmp_path / "two.png").read_bytes()
    assert one[:8] == b"\x89PNG\r\n\x1a\n"
    width, height = np.frombuffer(one[16:24], ">u4")
    size = figures.plot_recording(measurement).get_size_inches()
    assert (width, height) == tuple((size * SAVED_DPI).astype(int))
    assert sorted(path.name for path in tmp_path.iterdir()) == ["one.png", "two.png"]


def test_a_figure_that_cannot_be_written_is_refused_by_name(
    make_measurement: MakeMeasurement, tmp_path: Path
) -> None:
    with pytest.raises(OutputError, match=r"E401 .*figure\.png.* cannot be written"):
        figures.save_recording_figure(make_measurement(), tmp_path / "none" / "figure.png")


def test_one_stroke_alone(make_measurement: MakeMeasurement, make_row: MakeRow) -> None:
    measurement = make_measurement(make_row(1), make_row(2, l_value=3.3), make_row(2, l_value=3.6))
    figure = figures.plot_stroke(measurement, 2)
    (panel,) = panels(figure)
    assert len(panel.get_legend().get_texts()) == 2
    assert_legible(figure)
    with pytest.raises(ValueError, match=r"group=7 is not among the strokes found \(1, 2\)"):
        figures.plot_stroke(measurement, 7)


def test_notebooks_show_a_figure_by_itself(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    assert figures.plot_stroke(make_measurement(make_row()), 1)._repr_png_()[1:4] == b"PNG"


def test_stroke_labels_never_meet() -> None:
    """Identity: every stroke is in one label, and labels keep their distance."""
    generator = np.random.default_rng(11)
    times_s = {k + 1: float(t) for k, t in enumerate(np.sort(generator.uniform(0.0, 60.0, 50)))}
    labels = stroke_labels(times_s, character_s=0.5)
    named = [part for _, text in labels for part in text.split(", ")]
    numbers = []
    for part in named:
        first, _, last = part.partition("–")
        numbers += range(int(first), int(last or first) + 1)
    assert sorted(numbers) == list(range(1, 51))
    for (left_s, left), (right_s, right) in itertools.pairwise(labels):
        assert right_s - left_s >= 0.25 * (len(left) + len(right))


def test_no_pyplot_and_no_global_settings() -> None:
    program = (
        "import sys, matplotlib; before = matplotlib.rcParams.copy();"
        "import whistler.figures;"
        "print('matplotlib.pyplot' in sys.modules, before == matplotlib.rcParams.copy())"
    )
    process = subprocess.run([sys.executable, "-c", program], capture_output=True, check=True)
    assert process.stdout.split() == [b"False", b"True"]


def test_users_own_style_does_not_shrink_the_text(
    make_measurement: MakeMeasurement, make_row: MakeRow
) -> None:
    with mpl.rc_context({"font.size": 4.0, "xtick.labelsize": 3.0}):
        assert_legible(figures.plot_recording(make_measurement(make_row())))


def test_measured_synthetic_whistler_lies_on_its_true_curve(tmp_path: Path) -> None:
    """Recovery: the solid line against the truth of the synthesis, which shares no travel time."""
    from whistler.synthesis.files import flac_bytes
    from whistler.synthesis.quick import quick_scene
    from whistler.synthesis.render import render

    scene = quick_scene(
        3.0, equatorial_density_cm3=900.0, snr_db=20.0, duration_s=6.0, sample_rate_hz=24_000
    )
    synthetic = render(scene)
    path = tmp_path / "night_20250314T020000Z.flac"
    path.write_bytes(flac_bytes(synthetic))
    measurement = whistler.measure_recording(path)
    truth = synthetic.truth.whistlers[0]
    (panel,) = panels(measurement.plot(measurement.rows[0].group))
    solid = panel.lines[0]
    order = np.argsort(truth.trace.frequency_hz)
    expected_s = np.interp(
        1e3 * np.asarray(solid.get_ydata()),
        np.asarray(truth.trace.frequency_hz)[order],
        np.asarray(truth.trace.time_s)[order],
    )
    # 2 ms: a tenth of the spectrogram's window, what the eye can tell on the figure
    assert np.asarray(solid.get_xdata()) == pytest.approx(expected_s, abs=0.002)
