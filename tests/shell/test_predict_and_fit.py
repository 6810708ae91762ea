"""``whistler predict`` and ``whistler fit``, and the table of picks."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from shell_helpers import Whistler, table

from fieldlines import CentredDipole
from fieldlines.line import FieldLineModel
from whistler.errors import UsageError
from whistler.picks import DEFAULT_SD_S, read_picks
from whistler.prediction import Prediction, plot_prediction, predict_path

PATH = ("predict", "--l", "3", "--density", "900")


def test_prediction_document(whistler: Whistler) -> None:
    run = whistler(*PATH, "--frequencies", "1000,2000,5000", "--json")
    assert (run.code, run.err) == (0, "")
    document = json.loads(run.out)
    assert list(document) == [
        "schema",
        "settings",
        "frequency_hz",
        "time_s",
        "nose_frequency_hz",
        "nose_time_s",
        "dispersion_s_sqrt_hz",
        "equatorial_gyrofrequency_hz",
        "tube_content_m2",
    ]
    assert document["frequency_hz"] == [1000.0, 2000.0, 5000.0]
    assert document["settings"]["l_value"] == 3.0


def test_prediction_against_textbook_rules(whistler: Whistler) -> None:
    """Reference, from memory: a dipole's equatorial gyrofrequency is 873.6 kHz / L^3 for a surface
    field of 31.2 uT (the 2025 dipole is 4.7 % weaker: tolerance 5 %); the nose lies near 0.37 of
    it (0.35 to 0.41 over usual models)."""
    document = json.loads(whistler(*PATH, "--json").out)
    gyrofrequency_hz = document["equatorial_gyrofrequency_hz"]
    assert gyrofrequency_hz == pytest.approx(873.6e3 / 27, rel=0.05)
    assert 0.35 < document["nose_frequency_hz"] / gyrofrequency_hz < 0.41


def test_every_hop_takes_as_long(whistler: Whistler) -> None:
    """Identity: three crossings take three times one."""
    one, three = (
        json.loads(whistler(*PATH, "--hops", hops, "--frequencies", "5000", "--json").out)
        for hops in ("1", "3")
    )
    assert three["time_s"][0] == pytest.approx(3 * one["time_s"][0], abs=2e-6)  # rounded to 1e-6
    assert three["nose_time_s"] == one["nose_time_s"]


def test_prediction_table_and_figures(whistler: Whistler, tmp_path: Path) -> None:
    run = whistler(*PATH, "--figure", "p.png")
    assert run.code == 0
    assert max(map(len, run.out.splitlines())) <= 80
    assert (tmp_path / "p.png").read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"
    assert whistler(*PATH, "--figure", "p.svg", "--quiet").code == 0
    assert b"<svg" in (tmp_path / "p.svg").read_bytes()


def test_a_nose_beyond_validity_is_null(whistler: Whistler) -> None:
    """A density so low that waves hardly slow down has no nose: null, and words in the table."""
    thin = ("predict", "--l", "2", "--density", "0.01")
    document = json.loads(whistler(*thin, "--json").out)
    assert document["nose_frequency_hz"] is None
    assert document["nose_time_s"] is None
    assert "none within the model's validity" in whistler(*thin).out


def test_the_figure_shows_what_was_predicted() -> None:
    """Reference: the numbers handed in."""
    from matplotlib.figure import Figure

    prediction = Prediction(
        l_value=3.0,
        density_cm3=900.0,
        hops=2,
        frequency_hz=np.array([1e3, 4e3]),
        time_s=np.array([5.0, 2.5]),
        curve_hz=np.array([1e3, 2e3, 4e3]),
        curve_s=np.array([5.0, 3.5, 2.5]),
        nose_frequency_hz=11e3,
        nose_time_s=1.0,
        dispersion_s_sqrt_hz=70.0,
        equatorial_gyrofrequency_hz=31e3,
        tube_content_m2=1e17,
    )
    ax = plot_prediction(prediction, Figure().add_subplot())
    curve, nose = ax.get_lines()
    assert np.array_equal(curve.get_xydata(), [[5.0, 1.0], [3.5, 2.0], [2.5, 4.0]])
    assert np.array_equal(nose.get_xydata(), [[2.0, 11.0]])
    assert (ax.get_xlabel(), ax.get_ylabel()) == ("time after the lightning (s)", "frequency (kHz)")


def test_the_figure_is_smooth_between_few_frequencies() -> None:
    """Identity: the curve passes the table's ends; its two hundred points lie within 5 % of one
    another in frequency. Tolerance: rounding, and 200 steps over a factor of eight."""
    model = FieldLineModel(CentredDipole.from_date(2025.0))
    path = predict_path(
        3.0, density_cm3=900.0, model=model, hops=3, frequencies_hz=[8000.0, 1000.0]
    )
    assert path.frequency_hz.size == 2
    assert path.curve_hz.size == 200
    assert np.diff(np.log(path.curve_hz)).max() < 0.05
    assert path.curve_s[[-1, 0]] == pytest.approx(path.time_s, rel=1e-9)


def picks_from(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_picks_by_trace(tmp_path: Path) -> None:
    """Reference: the numbers written here; order by frequency, names by appearance."""
    text = (
        "trace,time_s,frequency_hz,time_sd_s\n"
        "b,2.5,2000,0.01\n\n"
        "a,1.5,4000,\n"
        "b,2.0,3000,0.02\n"
        "b,3.0,1000,0.03\n"
    )
    traces = read_picks(picks_from(tmp_path / "p.csv", text))
    assert list(traces) == ["b", "a"]
    assert traces["b"].frequency_hz.tolist() == [1000, 2000, 3000]
    assert traces["b"].time_s.tolist() == [3.0, 2.5, 2.0]
    assert traces["b"].time_sd_s.tolist() == [0.03, 0.01, 0.02]
    assert traces["a"].time_sd_s.tolist() == [DEFAULT_SD_S]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "line 1: no column 'frequency_hz'"),
        ("frequency_hz\n1000\n", "line 1: no column 'time_s'"),
        ("frequency_hz,time_s,time\n", "line 1: unknown column 'time'"),
        ("frequency_hz,time_s,time_s\n", "line 1: a column appears twice"),
        ("frequency_hz,time_s\n", "no points"),
        ("frequency_hz,time_s\n1000,2\n2000\n", "line 3: not as many cells as columns"),
        ("frequency_hz,time_s\n1000,two\n", "line 2: time_s='two' is not a number"),
        ("frequency_hz,time_s\n0,2\n", "line 2: frequency_hz=0 is outside 1 to 100000"),
        ("frequency_hz,time_s\n1000,nan\n", "line 2: time_s=nan is outside"),
        ("frequency_hz,time_s,time_sd_s\n1000,2,0\n", "line 2: time_sd_s=0 is outside"),
        ("frequency_hz,time_s\n" + "x,2\n" * 5, "line 4: .* and 2 more"),
    ],
)
def test_a_fault_in_picks_names_its_line(tmp_path: Path, text: str, message: str) -> None:
    with pytest.raises(UsageError, match=rf"E606 .*p\.csv.*{message}"):
        read_picks(picks_from(tmp_path / "p.csv", text))


@pytest.fixture
def picks(tmp_path: Path, whistler: Whistler) -> Path:
    """Points of a path of L 3 and 900 cm^-3 whose lightning struck at 10 s."""
    frequencies = ",".join(str(hz) for hz in range(1500, 12_001, 500))
    document = json.loads(whistler(*PATH, "--frequencies", frequencies, "--json").out)
    lines = ["frequency_hz,time_s,time_sd_s"]
    lines += [
        f"{frequency},{10 + time_s},0.002"
        for frequency, time_s in zip(document["frequency_hz"], document["time_s"], strict=True)
    ]
    return picks_from(tmp_path / "picks.csv", "\n".join(lines))


def test_picks_are_fitted(whistler: Whistler, picks: Path) -> None:
    """Recovery: L and density that predict made. Tolerance: the picks are rounded to 1 us, far
    below the 2 ms they claim, so the result must lie well within its own sigma."""
    run = whistler("fit", picks.name, "--lightning-time", "10", "--json", "--out", "out")
    assert (run.code, run.err) == (0, "")
    (row,) = json.loads(run.out)["whistlers"]
    assert abs(row["l_value"] - 3.0) < 0.3 * row["l_value_sd"]
    density, sd = row["equatorial_density_cm3"], row["equatorial_density_sd_cm3"]
    assert abs(density - 900.0) < 0.3 * sd
    assert row["uncertainty_status"] == "ok"
    assert table(picks.parent / "out/catalogue.csv")[0]["recording"] == picks.name
    again = whistler("fit", picks.name, "--lightning-time", "10", "--out", "out")
    assert (again.code, again.err) == (0, "")
    assert "900" in again.out


def test_too_few_picks(whistler: Whistler, tmp_path: Path) -> None:
    picks_from(tmp_path / "p.csv", "frequency_hz,time_s\n1000,2\n2000,1.8\n")
    run = whistler("fit", "p.csv")
    assert (run.code, run.codes) == (2, ["E604"])


@pytest.mark.parametrize(
    ("option", "value"),
    [
        *[("--l-value", value) for value in ("0", "20", "nan", "-3")],
        *[("--sferic-time-sd", value) for value in ("1e-300", "0", "11", "nan")],
        ("--sferic-time", "inf"),
        ("--lightning-time", "1e7"),
    ],
)
def test_a_tie_outside_its_range_is_refused(
    whistler: Whistler, picks: Path, option: str, value: str
) -> None:
    """Identity: the option is named, with what it may be; nothing is written."""
    run = whistler("fit", picks.name, f"{option}={value}", "--out", "never")
    assert (run.code, run.codes, run.out) == (2, ["E601"], "")
    assert f'"{option}": {float(value)} is not a number from ' in run.err
    assert not (picks.parent / "never").exists()


def test_the_least_sferic_sigma_is_fitted(whistler: Whistler, picks: Path) -> None:
    """Identity: what is allowed works, and its result can be fitted again."""
    near = ("--sferic-time", "10.03", "--sferic-time-sd", "1e-6", "--out", "out")
    assert whistler("fit", picks.name, *near).code == 0
    again = whistler("fit", "out/catalogue.jsonl", "--l-value", "3")
    assert (again.code, again.err) == (0, "")
