"""Traces edited by hand: the edits themselves, and fits of edited rows."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from makers import model_trace

from fieldlines import FieldLineModel
from whistler.edit import (
    TOLERANCE_HZ,
    Edit,
    add_point,
    apply_edits,
    drop_points,
    move_point,
    same_points,
)
from whistler.editfile import edit_line, parse_edit, read_edits
from whistler.errors import UsageError
from whistler.handfit import LEAST_POINTS
from whistler.measure import measure_recording
from whistler.pickfit import fit_picks, left_over_s, refit
from whistler.picks import DEFAULT_SD_S
from whistler.rows import COLUMNS, WhistlerRow, row_values
from whistler.saved import row_from_json, settings_from_dict
from whistler.settings import Settings
from whistler.station import Station
from whistler.trace import Trace

ROOT = Path(__file__).parents[2]
PATHS = ROOT / "demo_recordings/skarnmoor_20250314T020000Z_paths.flac"
ECHOES = ROOT / "demo_recordings/skarnmoor_20250314T023000Z_echoes.flac"

SIGMAS = {"l_value": "l_value_sd", "equatorial_density_cm3": "equatorial_density_sd_cm3"}
KEPT = ("recording", "group", "hops", "time", "sferic_seen", "uncertainty_status", "flags")


def fixed(*columns: list[float]) -> Trace:
    """A trace whose arrays refuse to be written to."""
    arrays = [np.array(column, dtype=np.float64) for column in columns]
    for array in arrays:
        array.setflags(write=False)
    return Trace(*arrays)


@pytest.fixture
def trace() -> Trace:
    return fixed([1000, 2000, 3000, 4000], [3.0, 2.5, 2.25, 2.125], [0.001, 0.002, 0.003, 0.004])


def points(trace: Trace) -> list[tuple[float, float, float]]:
    columns = (trace.frequency_hz, trace.time_s, trace.time_sd_s)
    return list(zip(*(column.tolist() for column in columns), strict=True))


def test_the_three_edits(trace: Trace) -> None:
    """Reference: the points written out here."""
    first, second, third, fourth = points(trace)
    assert points(drop_points(trace, frequency_hz=2050.0)) == [first, third, fourth]
    ends = drop_points(trace, frequency_hz=2000.0, frequency_high_hz=3000.0)
    assert points(ends) == [first, fourth]
    moved = move_point(trace, frequency_hz=2950.0, time_s=2.3)
    assert points(moved) == [first, second, (3000.0, 2.3, DEFAULT_SD_S), fourth]
    added = add_point(trace, frequency_hz=2500.0, time_s=2.4, time_sd_s=0.001)
    assert points(added) == [first, second, (2500.0, 2.4, 0.001), third, fourth]
    assert points(add_point(trace, frequency_hz=500.0, time_s=4.0))[0] == (500.0, 4.0, 0.005)


@given(
    frequencies_hz=st.lists(st.floats(1.0, 1e5), min_size=1, max_size=12, unique=True).map(sorted),
    data=st.data(),
)
def test_a_point_dropped_and_added_again_changes_nothing(
    frequencies_hz: list[float], data: st.DataObject
) -> None:
    """Identity."""
    count = len(frequencies_hz)
    numbers = st.lists(st.floats(1e-6, 10.0), min_size=count, max_size=count)
    trace = fixed(frequencies_hz, data.draw(numbers), data.draw(numbers))
    frequency_hz, time_s, time_sd_s = points(trace)[data.draw(st.integers(0, count - 1))]
    without = drop_points(trace, frequency_hz=frequency_hz)
    assert len(without.time_s) == count - 1
    again = add_point(without, frequency_hz=frequency_hz, time_s=time_s, time_sd_s=time_sd_s)
    assert same_points(again, trace)


def test_edits_follow_each_other_on_the_trace_they_name(trace: Trace) -> None:
    traces = {"1": trace, "b": trace}
    edits = [
        Edit("add", 5000.0, 2.1, trace="b"),
        Edit("move", 5000.0, 2.0, 0.001, trace="b"),
        Edit("drop", 1000.0, trace=1),
        Edit("accept", 2000.0, trace="1"),
        Edit("accept", trace="1"),
    ]
    after = apply_edits(traces, edits)
    assert points(after["b"]) == [*points(trace), (5000.0, 2.0, 0.001)]
    assert points(after["1"]) == points(trace)[1:]
    assert traces == {"1": trace, "b": trace}
    assert points(apply_edits({"x": trace}, [Edit("drop", 1000.0)])["x"]) == points(trace)[1:]


@pytest.mark.parametrize(
    ("edit", "message"),
    [
        (Edit("drop", 2500.0), r"no point within 100 Hz \(nearest: 1000, 2000, 3000 Hz\)"),
        (Edit("move", 9000.0, 2.0), r"no point within 100 Hz \(nearest: 2000, 3000, 4000 Hz\)"),
        (Edit("accept", 9000.0), "no point within 100 Hz"),
        (Edit("drop", 2100.0, frequency_high_hz=2900.0), r"no point in that range \(nearest: "),
        (Edit("add", 2000.0, 2.0), "a point of that frequency is there already; move it"),
        (Edit("drop", 2000.0, trace=2), r"no such trace \(the traces are 1\)"),
    ],
)
def test_an_edit_without_effect_is_an_error(trace: Trace, edit: Edit, message: str) -> None:
    with pytest.raises(UsageError, match=rf"E607 .*{message}"):
        apply_edits({"1": trace}, [edit])


def test_an_edit_that_could_be_two_is_an_error(trace: Trace) -> None:
    with pytest.raises(UsageError, match=r"E607 .*no trace is named \(the traces are a, b\)"):
        apply_edits({"a": trace, "b": trace}, [Edit("drop", 2000.0)])
    twice = fixed([2000, 2000, 3000], [2.5, 2.6, 2.2], [0.001] * 3)
    with pytest.raises(UsageError, match=r"E607 .*two points as near"):
        drop_points(twice, frequency_hz=2000.0 - 0.5 * TOLERANCE_HZ)


@pytest.mark.parametrize(
    ("values", "message"),
    [
        (("delete", 2000.0), "unknown action 'delete'"),
        (("drop",), "no frequency_hz"),
        (("move", 2000.0), "no time_s"),
        (("drop", 2000.0, 2.5), "a time, which drop does not take"),
        (("move", 2000.0, 2.5, 0.0), "time_sd_s=0 is outside 1e-06 to 10"),
        (("add", 0.0, 2.5), "frequency_hz=0 is outside"),
        (("add", 2000.0, math.nan), "time_s=nan is outside"),
        (("move", 2000.0, 2.5, None, None, 3000.0), "a range of frequencies, which move does not"),
        (("drop", 3000.0, None, None, None, 2000.0), "a range from 3000 to 2000 Hz"),
    ],
)
def test_an_edit_that_cannot_be_meant(values: tuple[object, ...], message: str) -> None:
    with pytest.raises(UsageError, match=rf"E608 .*{message}"):
        Edit(*values)  # type: ignore[arg-type]


def test_edits_are_written_and_read(tmp_path: Path) -> None:
    """Reference: the edits written out here; identity for their lines."""
    edits = [
        Edit("drop", 2000.0, trace="1"),
        Edit("drop", 4000.0, frequency_high_hz=5000.5, trace="1"),
        Edit("move", 3000.0, 11.722, 0.002, "left, upper"),
        Edit("add", 3500.0, -1.5),
        Edit("accept", trace="2"),
    ]
    lines = ["action,frequency_hz,time_s,time_sd_s,trace", *map(edit_line, edits)]
    (tmp_path / "e.csv").write_text("\n".join(lines))
    stated = [replace(e, time_sd_s=e.sd_s) if e.time_s is not None else e for e in edits]
    assert read_edits(tmp_path / "e.csv") == stated
    (tmp_path / "e.csv").write_text(
        "frequency_hz,action\n2000, drop\n\n4000:5000.5,drop\n,accept\n"
    )
    bare = [replace(edit, trace=None) for edit in (edits[0], edits[1], edits[4])]
    assert read_edits(tmp_path / "e.csv") == bare
    assert parse_edit("move", "3000:11.722:0.002") == replace(edits[2], trace=None)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("action\ndrop\n", "line 1: no column 'frequency_hz'"),
        ("action,frequency_hz,time\n", "line 1: unknown column 'time'"),
        ("action,frequency_hz\nkill,2000\n", "line 2: unknown action 'kill'"),
        ("action,frequency_hz\ndrop,x\n", "line 2: frequency_hz='x' is not a number"),
        ("action,frequency_hz\ndrop,2000:\n", "line 2: frequency_hz='' is not a number"),
        ("action,frequency_hz\ndrop,1\nmove,2000\n", "line 3: no time_s"),
    ],
)
def test_a_fault_in_a_table_of_edits_names_its_line(
    tmp_path: Path, text: str, message: str
) -> None:
    (tmp_path / "e.csv").write_text(text)
    with pytest.raises(UsageError, match=rf"E608 .*e\.csv.*{message}"):
        read_edits(tmp_path / "e.csv")


@pytest.mark.parametrize(
    ("action", "text"),
    [("drop", "1:2:3"), ("drop", "x"), ("move", "2000"), ("add", "2000:1:0.1:9"), ("add", "")],
)
def test_options_that_cannot_be_read(action: str, text: str) -> None:
    with pytest.raises(UsageError, match=rf'E608 "--{action}".*write '):
        parse_edit(action, text)


def rounded(rows: list[WhistlerRow]) -> list[WhistlerRow]:
    """Rows as they come back from a file."""
    return [row_from_json(row_values(row)) for row in rows]


@pytest.mark.parametrize("path", [PATHS, ECHOES])
def test_accepting_gives_the_measured_numbers(path: Path) -> None:
    """Identity: the same points, sferic, hops and settings, from memory and from a file.

    From memory the fit starts at its own result, and what is left is the solver's tolerance (1e-7
    of the misfit: 1e-3 sigma). A file holds times to 1 us, of sigmas of 0.2 ms and more: 5e-3
    sigma, and 0.5 % of sigma.
    """
    measurement = measure_recording(path)
    for group in sorted({row.group for row in measurement.rows}):
        rows = [row for row in measurement.rows if row.group == group]
        for stored, slack in ((rows, 2e-3), (rounded(rows), 0.02)):
            fitted = refit(stored, settings=measurement.settings)
            for row, again in zip(rows, fitted, strict=True):
                for name, sd_name in SIGMAS.items():
                    sd = getattr(row, sd_name)
                    assert abs(getattr(again, name) - getattr(row, name)) < slack * sd
                    assert getattr(again, sd_name) == pytest.approx(sd, rel=5 * slack)
                for name in KEPT:
                    assert getattr(again, name) == getattr(row, name)
                for name in ("snr_db", "significance", "hop_probability"):
                    assert getattr(again, name) == pytest.approx(getattr(row, name), rel=1e-5)
                assert again.sferic_time_s == pytest.approx(row.sferic_time_s, abs=1e-6)


@pytest.fixture
def astray(model: FieldLineModel) -> list[WhistlerRow]:
    """Rows of two paths of a stroke at 5 s; the upper points of the first are of something else."""
    bands = {3.0: (1500.0, 9000.0), 2.5: (1500.0, 9000.0)}
    traces = [
        model_trace(model, l_value=l_value, density_m3=9e8, band_hz=band, lightning_time_s=5.0)
        for l_value, band in bands.items()
    ]
    upper = traces[0].frequency_hz > 6000.0
    wrong = replace(traces[0], time_s=traces[0].time_s + np.where(upper, 0.02, 0.0))
    picked = {"a": wrong, "b": traces[1]}
    return fit_picks(picked, settings=Settings(), lightning_time_s=5.0)


def test_dropping_what_is_wrong_gives_the_truth(astray: list[WhistlerRow]) -> None:
    """Recovery: L 3 and 900 cm^-3 from points without noise.

    Ten of twenty-five points 20 sigmas off pull L; without them the fit must be at the truth to
    within the solver's tolerance, far below its sigma.
    """
    before = astray[0]
    assert before.uncertainty_status != "ok" or abs(before.l_value - 3.0) > 3 * before.l_value_sd
    edits = [Edit("drop", 6000.0, frequency_high_hz=9000.0, trace=1)]
    after, beside = refit(astray, edits, lightning_time_s=5.0)
    assert abs(after.l_value - 3.0) < 0.01 * after.l_value_sd
    assert abs(after.equatorial_density_cm3 - 900.0) < 0.01 * after.equatorial_density_sd_cm3
    assert abs(beside.l_value - 2.5) < 0.01 * beside.l_value_sd
    assert after.frequency_high_hz <= 6000.0
    assert len(astray[0].trace.time_s) == 25


def test_what_was_edited_is_flagged(astray: list[WhistlerRow]) -> None:
    second = astray[1].trace
    frequency_hz, time_s, sd_s = points(second)[5]
    there_and_back = [
        Edit("drop", frequency_hz, trace=2),
        Edit("add", frequency_hz, time_s, sd_s, trace=2),
        Edit("accept", trace=1),
    ]
    unedited = refit(astray, there_and_back, lightning_time_s=5.0)
    assert [set(row.flags) & {"edited", "group-edited"} for row in unedited] == [set(), set()]
    edited = refit(astray, [Edit("move", frequency_hz, time_s, trace=2)], lightning_time_s=5.0)
    assert [row.flags[-1] for row in edited] == ["group-edited", "edited"]
    assert points(edited[1].trace)[5] == (frequency_hz, time_s, DEFAULT_SD_S)
    again = refit(edited, lightning_time_s=5.0)  # once edited, edited
    assert [row.flags[-1] for row in again] == ["group-edited", "edited"]


def test_picks_are_edited_too(model: FieldLineModel) -> None:
    """Recovery: a wild point moved to where it belongs."""
    trace = model_trace(model, l_value=3.0, density_m3=9e8, band_hz=(1500.0, 9000.0), count=6)
    right_s = float(trace.time_s[3])
    wrong = replace(trace, time_s=trace.time_s + np.where(np.arange(6) == 3, 0.1, 0.0))
    edits = [Edit("move", float(trace.frequency_hz[3]), right_s, 0.001, trace="x")]
    kept, fixed_up = (
        fit_picks({"x": wrong}, made, settings=Settings(), lightning_time_s=0.0)[0]
        for made in ([], edits)
    )
    assert abs(fixed_up.l_value - 3.0) < 0.01 * fixed_up.l_value_sd
    assert ("edited" in kept.flags, "edited" in fixed_up.flags) == (False, True)
    assert np.abs(left_over_s(fixed_up, settings=Settings())).max() < 1e-5


def test_hops_and_time_can_be_told(model: FieldLineModel) -> None:
    """Identity: three crossings share what one had, so the dispersion of one is a third.

    Within 2 %: the shape of a three-hop trace is that of one hop scaled only well below the nose.
    """
    trace = model_trace(model, l_value=3.0, density_m3=9e8, band_hz=(1500.0, 9000.0), hops=1)
    (row,) = fit_picks({"1": trace}, settings=Settings(), sferic_time_s=0.045)
    assert row.sferic_seen
    (free,) = refit([row], free_time=True)
    assert not free.sferic_seen and free.l_value_sd > row.l_value_sd
    (three,) = refit([row], hops=3, free_time=True)
    assert three.hops == 3
    third = row.dispersion_s_sqrt_hz / 3.0
    assert three.dispersion_s_sqrt_hz == pytest.approx(third, rel=0.02)
    (held,) = refit([row], l_value=2.99, free_time=True)
    assert held.l_value == pytest.approx(2.99, rel=1e-4) and "l-given" in held.flags


def test_rows_that_cannot_be_fitted(astray: list[WhistlerRow]) -> None:
    other = replace(astray[1], group=2)
    for rows, message in (([astray[0], other], "rows of 2 strokes"), ([], "no rows")):
        with pytest.raises(UsageError, match=rf"E609 .*{message}"):
            refit(rows)
    with pytest.raises(UsageError, match=r"E601 .*odd and even"):
        refit(astray, hops=(1, 2))
    with pytest.raises(UsageError, match=r"E601 .*3 numbers for 2 traces"):
        refit(astray, hops=(1, 3, 1))
    all_but_two = [Edit("drop", 1600.0, frequency_high_hz=8800.0, trace=1)]
    with pytest.raises(UsageError, match=rf"E604 .*'1' has 2 points; pick at least {LEAST_POINTS}"):
        refit(astray, all_but_two)


def test_rows_and_settings_come_back_from_json(astray: list[WhistlerRow]) -> None:
    """Identity, to the digits that are kept."""
    for row in [*astray, WhistlerRow("a.wav", 3)]:
        values = row_values(row)
        back = row_from_json(values)
        assert row_values(back) == values
        assert isinstance(back.flags, tuple) and len(back.trace.time_s) == len(row.trace.time_s)
    station = Station("Skarnmoor", 61.5, 14.25, fo_f2_sd_mhz=0.4, channel_names=("a", "b"))
    options = (("start", "2025-03-14"), ("edits", ("drop,2000,,,1",)))
    settings = Settings(station, channel="mean", l_range=(1.7, 5.0), options=options)
    assert settings_from_dict(settings.to_dict(), path=Path("run.json")) == settings
    newer = {**row_values(astray[0]), "a_column_of_later": 3}
    assert row_values(row_from_json(newer)) == row_values(astray[0])


def point(**values: object) -> dict[str, object]:
    """A trace of one point."""
    whole = {"frequency_hz": 2000.0, "time_s": 1.0, "time_sd_s": 0.002, **values}
    return {name: [value] for name, value in whole.items()}


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"group": 1.5}, "group=1.5 is not a whole number"),
        ({"l_value": "x"}, "l_value='x' is not a number"),
        ({"sferic_seen": 1}, "sferic_seen=1 is neither true nor false"),
        ({"recording": 3}, "recording=3 is not text"),
        ({"flags": "echo"}, "flags='echo' is not a list of words"),
        ({"trace": {}}, "trace without frequency_hz"),
        ({"trace": {"frequency_hz": [1], "time_s": [], "time_sd_s": [1]}}, "different lengths"),
        ({"trace": {"frequency_hz": ["x"], "time_s": [1], "time_sd_s": [1]}}, "other than numbers"),
        ({"trace": point(time_sd_s=0)}, "time_sd_s=0 is outside 1e-06 to 10"),
        ({"trace": point(time_s=None)}, r"other than numbers \(time_s=None\)"),
        ({"trace": point(time_s=2e6)}, r"time_s=2e\+06 is outside"),
        ({"trace": point(frequency_hz=-4)}, "frequency_hz=-4 is outside 1 to 100000"),
        ({"trace": {**point(), "time_s": 1.0}}, "other than lists"),
        ({"recording": None}, "recording=None is not text"),
        ({"l_value": -2}, "l_value=-2 is outside 1.2 to 8"),
        ({"l_value": float("inf")}, "l_value is a number beyond"),
        ({"equatorial_density_cm3": 0}, "equatorial_density_cm3=0 is outside"),
        ({"equatorial_density_cm3": 10**400}, "equatorial_density_cm3 is a number beyond"),
        ({"l_value_sd": -0.1}, "l_value_sd=-0.1 is outside 0 to inf"),
        ({"sferic_probability": 1.1}, "sferic_probability=1.1 is outside 0 to 1"),
        ({"hops": 0}, "hops=0 is outside 1 to 20"),
        ({"hops": 99}, "hops=99 is outside 1 to 20"),
        ({"time": "junk"}, "time='junk' is not a time"),
        ({"time": "0001-01-01T00:00:00+12:00"}, "is not a time"),
        ({"time": "0500-01-01"}, "is outside the years 1000 to 9000"),
        ({"frequency_low_hz": -4}, "frequency_low_hz=-4 is outside"),
        ({"sferic_seen": True}, "without its time and one-sigma"),
        ({"sferic_seen": True, "sferic_time_s": 1.0, "sferic_time_sd_s": 0}, "without its time"),
    ],
)
def test_a_fault_in_a_saved_row_is_named(change: dict[str, object], message: str) -> None:
    good = row_values(WhistlerRow("a.wav", 1))
    assert set(good) == {*(column.name for column in COLUMNS), "trace"}
    with pytest.raises(ValueError, match=message):
        row_from_json({**good, **change})
