"""``whistler fit`` on measured results, and its edits."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import pytest
from shell_helpers import Run, Whistler, table

from whistler import catalogue
from whistler.errors import UsageError
from whistler.measure import measure_recording
from whistler.picks import DEFAULT_SD_S
from whistler.saved import is_saved_result, read_results, select_stroke
from whistler.settings import Settings
from whistler.station import load_station

DEMO = Path(__file__).parents[2] / "demo_recordings"
NAME = "skarnmoor_20250314T023000Z_echoes.flac"
SIGMAS = {"l_value": "l_value_sd", "equatorial_density_cm3": "equatorial_density_sd_cm3"}


@pytest.fixture(scope="module")
def measured(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the catalogue of a demo recording and the document of the same."""
    folder = tmp_path_factory.mktemp("measured")
    settings = Settings(load_station(DEMO / "skarnmoor.toml"), max_hops=6)
    entry = catalogue.entry(measure_recording(DEMO / NAME, settings))
    entry.recording["path"] = NAME
    for row in entry.whistlers:
        row["recording"] = NAME
    catalogue.write_catalogue(folder, [entry], settings=settings)
    document = catalogue.document([entry], settings)
    (folder / "document.txt").write_text(catalogue.json_text(document, indent=1))
    return folder


@pytest.fixture
def results(measured: Path, tmp_path: Path) -> Path:
    """A copy of it where the command runs."""
    return shutil.copytree(measured, tmp_path / "results")


def rows_in(text: str) -> list[dict[str, Any]]:
    rows: list[dict[str, Any]] = json.loads(text)["whistlers"]
    return rows


def stored(results: Path, group: int) -> list[dict[str, Any]]:
    rows = [json.loads(line) for line in (results / "catalogue.jsonl").read_text().splitlines()]
    return [row for row in rows if row["group"] == group]


def fit(whistler: Whistler, *arguments: str, group: int = 1) -> Run:
    return whistler("fit", "results/catalogue.jsonl", "--group", str(group), *arguments)


@pytest.mark.parametrize("name", ["catalogue.jsonl", "document.txt"])
@pytest.mark.parametrize("group", [1, 2])
def test_without_edits_the_measured_numbers_come_again(
    whistler: Whistler, results: Path, name: str, group: int
) -> None:
    """Identity: an echo train of three, and one of two, with their sferics and settings.

    Stored times are rounded to 1 us, 0.5 % of the sigmas there: so far may sigma and, in units of
    it, L be off (twice that for what else is rounded). D0 is fixed 100 times better than L.
    """
    run = whistler("fit", f"results/{name}", "--group", str(group), "--json")
    assert (run.code, run.err) == (0, "")
    rows = rows_in(run.out)
    for row, before in zip(rows, stored(results, group), strict=True):
        for value, sd in SIGMAS.items():
            assert abs(row[value] - before[value]) < 0.01 * before[sd]
            assert row[sd] == pytest.approx(before[sd], rel=0.01)
        assert row["dispersion_s_sqrt_hz"] == pytest.approx(
            before["dispersion_s_sqrt_hz"], rel=1e-5
        )
        same = ("recording", "group", "hops", "time", "sferic_time_s", "flags", "snr_db", "trace")
        assert {key: row[key] for key in same} == {key: before[key] for key in same}
    settings = json.loads(run.out)["settings"]
    assert (settings["max_hops"], settings["station"]["name"]) == (6, "Skarnmoor")
    assert settings["options"]["sferic_time_s"] == rows[0]["sferic_time_s"]
    assert "edits" not in settings["options"]


def test_edits_are_made_in_order_and_told(whistler: Whistler, results: Path) -> None:
    """Reference: the points written out here. Table first, then drops, moves, additions."""
    trace = stored(results, 1)[1]["trace"]
    frequency_hz, time_s, sd_s = (trace[k] for k in ("frequency_hz", "time_s", "time_sd_s"))
    edits = f"action,frequency_hz,time_s,trace\ndrop,{frequency_hz[0]},,2\naccept,,,1\n"
    (results / "edits.csv").write_text(edits)
    arguments = ["--trace", "2", "--edits", "results/edits.csv", "--out", "edited"]
    arguments += ["--add", f"{frequency_hz[0]}:{time_s[0]}", "--drop", f"{frequency_hz[2]:.0f}"]
    arguments += ["--move", f"{frequency_hz[3]}:{time_s[3] + 0.001}:0.002"]
    files = {path: path.read_bytes() for path in results.iterdir()}
    run = fit(whistler, *arguments)
    assert (run.code, run.err) == (0, "")
    assert {path: path.read_bytes() for path in results.iterdir()} == files
    rows = stored(results.parent / "edited", 1)
    after = rows[1]["trace"]
    assert after["frequency_hz"] == [*frequency_hz[:2], *frequency_hz[3:]]
    assert after["time_s"] == pytest.approx([*time_s[:2], time_s[3] + 0.001, *time_s[4:]])
    assert after["time_sd_s"] == [DEFAULT_SD_S, sd_s[1], 0.002, *sd_s[4:]]
    assert [row["flags"] for row in rows] == [
        ["echo", "group-edited"],
        ["echo", "edited"],
        ["echo", "group-edited"],
    ]
    record = json.loads((results.parent / "edited/run.json").read_text())
    assert record["settings"]["options"]["edits"] == [
        f"drop,{frequency_hz[0]:.12g},,,2",
        "accept,,,,1",
        f"drop,{frequency_hz[2]:.0f},,,2",
        f"move,{frequency_hz[3]:.12g},{time_s[3] + 0.001:.12g},0.002,2",
        f"add,{frequency_hz[0]:.12g},{time_s[0]},{DEFAULT_SD_S},2",
    ]
    assert record["inputs"][0]["path"] == "results/catalogue.jsonl"
    assert [row["recording"] for row in table(results.parent / "edited/catalogue.csv")] == [
        NAME
    ] * 3


def test_an_edited_catalogue_can_be_edited_again(whistler: Whistler, results: Path) -> None:
    frequency_hz = [f"{value:.0f}" for value in stored(results, 1)[0]["trace"]["frequency_hz"]]
    assert fit(whistler, "--trace", "1", "--drop", frequency_hz[1], "--out", "one").code == 0
    again = ("fit", "one/catalogue.jsonl", "--trace", "1", "--drop", frequency_hz[3])
    document = json.loads(whistler(*again, "--json").out)
    assert document["settings"]["options"]["edits"] == [
        f"drop,{frequency_hz[1]},,,1",
        f"drop,{frequency_hz[3]},,,1",
    ]
    kept = rows_in(whistler("fit", "one/catalogue.jsonl", "--json").out)
    assert ["edited" in row["flags"] for row in kept] == [True, False, False]
    same = fit(whistler, "--trace", "1", "--drop", frequency_hz[1], "--out", "one")
    assert (same.code, same.err) == (0, "")
    other = fit(whistler, "--trace", "1", "--drop", frequency_hz[2], "--out", "one")
    assert (other.code, other.codes) == (74, ["E402"])


def test_the_edited_result_is_never_written_over(whistler: Whistler, results: Path) -> None:
    files = {path: path.read_bytes() for path in results.iterdir()}
    for extra in ([], ["--overwrite"]):
        run = fit(whistler, "--out", "results", *extra)
        assert (run.code, run.codes) == (74, ["E402"])
        assert "left as it is" in run.err
    assert {path: path.read_bytes() for path in results.iterdir()} == files


def test_options_replace_what_was_stored(whistler: Whistler, results: Path) -> None:
    """Without a sferic sigma can only grow; what is not given stays as it was stored."""
    before = stored(results, 2)
    run = fit(whistler, "--free-time", "--alpha", "2", "--fit-prior-sd", "0.2", "--json", group=2)
    free = rows_in(run.out)
    assert [row["sferic_seen"] for row in free] == [False, False]
    assert free[0]["l_value_sd"] > before[0]["l_value_sd"]
    settings = json.loads(run.out)["settings"]
    assert (settings["density_exponent"], settings["fit_prior_sd_dex"]) == (2.0, 0.2)
    assert (settings["density_exponent_sd"], settings["options"]["sferic_time_s"]) == (0.65, None)
    assert settings["max_hops"] == 6
    other = json.loads(fit(whistler, "--hops", "4,6", "--free-time", "--json", group=2).out)
    assert [row["hops"] for row in other["whistlers"]] == [4, 6]
    assert other["settings"]["options"]["hops"] == [4, 6]


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (["--trace", "1", "--drop", "20000"], "E607"),
        (["--trace", "1", "--move", "20000:3"], "E607"),
        (["--drop", "3000"], "E607"),  # of three traces
        (["--trace", "4", "--drop", "3000"], "E607"),
        (["--trace", "1", "--drop", "3000:1:2"], "E608"),
        (["--trace", "1", "--add", "3000"], "E608"),
        (["--edits", "absent.csv"], "E608"),
        (["--trace", "1"], "E605"),
        (["--date", "2025-03-14"], "E605"),
        (["--free-time", "--sferic-time", "2"], "E605"),
        (["--recording", "other.wav"], "E609"),
        (["--hops", "1,2,3"], "E601"),
        (["--hops", "0"], "E601"),
        (["--hops", "one"], "E615"),
        (["--trace", "1", "--drop", "1:90000"], "E604"),
    ],
)
def test_what_cannot_be_done_is_said(
    whistler: Whistler, results: Path, arguments: list[str], code: str
) -> None:
    run = fit(whistler, *arguments, "--out", "never")
    assert (run.code, run.codes, run.out) == (2, [code], "")
    assert not (results.parent / "never/catalogue.csv").exists()


def test_the_stroke_must_be_clear(whistler: Whistler, results: Path) -> None:
    run = whistler("fit", "results/catalogue.jsonl")
    assert (run.code, run.codes) == (2, ["E609"])
    assert "2 strokes (1, 2); choose one with --group" in run.err
    assert "no stroke 7; choose one of 1, 2" in fit(whistler, group=7).err
    text = (results / "catalogue.jsonl").read_text()
    (results / "catalogue.jsonl").write_text(text + text.replace(NAME, f"b/{NAME}"))
    run = fit(whistler)
    assert (run.code, run.codes) == (2, ["E609"])
    assert f"2 recordings have such a stroke ({NAME}, b/{NAME}); name one" in run.err
    assert fit(whistler, "--recording", f"b/{NAME}").code == 0


@pytest.mark.parametrize(
    ("text", "reason"),
    [
        ('{"group": 1', "row 1: "),
        ('{"schema": 1}', "JSON without a list of whistlers"),
        ('{"whistlers": []}', "no settings in it"),
        ('{"whistlers": [], "settings": {"max_hops": 99}}', "E601"),
        ('{"whistlers": [], "settings": {"hops": 9}}', "unknown setting 'hops'"),
        ('{"whistlers": [], "settings": {"station": 9}}', "settings that are not an object"),
        ('{"whistlers": [], "settings": {"max_hops": "x"}}', "a setting is of the wrong kind"),
        ('{"whistlers": [], "settings": {"options": {"edits": 5}}}', "not a list of lines"),
        ('{"whistlers": [], "settings": {}}', "no whistlers"),
        ('{"recording": "a", "group": 1, "hops": 1}', "row 1: no 'trace'"),
    ],
)
def test_a_faulty_result_is_refused(tmp_path: Path, text: str, reason: str) -> None:
    (tmp_path / "x").write_text(text)
    assert is_saved_result(tmp_path / "x")
    with pytest.raises(UsageError, match=reason):
        select_stroke(read_results(tmp_path / "x"))


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ({"recording": None}, "recording=None"),
        ({"l_value": -2}, "l_value=-2"),
        ({"hops": 99}, "hops=99"),
        ({"time": "junk"}, "time='junk'"),
        ({"frequency_low_hz": -4}, "frequency_low_hz=-4"),
    ],
)
def test_a_damaged_row_is_named(
    whistler: Whistler, results: Path, change: dict[str, Any], reason: str
) -> None:
    """Identity: file and row are named, whichever stroke was asked for."""
    path = results / "catalogue.jsonl"
    first, second, *others = path.read_text().splitlines()
    path.write_text("\n".join([first, json.dumps({**json.loads(second), **change}), *others]))
    run = fit(whistler, group=2)
    assert (run.code, run.codes, run.out) == (2, ["E609"], "")
    assert f'"results/catalogue.jsonl": row 2: {reason}' in run.err


def test_a_stored_tie_outside_its_range_is_refused(whistler: Whistler, results: Path) -> None:
    """Identity: an L that an earlier fit is said to have held is checked like a given one."""
    record = json.loads((results / "run.json").read_text())
    for stored_l in (0, "x"):
        record["settings"]["options"] = {"l_value": stored_l}
        (results / "run.json").write_text(json.dumps(record))
        run = fit(whistler)
        assert (run.code, run.codes) == (2, ["E601"])
        assert f'"--l-value": {stored_l} is not a number from 1.25 to 7.5' in run.err


def test_rows_without_the_record_of_their_run(whistler: Whistler, results: Path) -> None:
    (results / "run.json").unlink()
    run = fit(whistler, "--json")
    assert (run.code, run.codes) == (0, ["N502"])
    assert json.loads(run.out)["settings"]["max_hops"] == 5
    assert fit(whistler, "--quiet").err == ""
    (results / "run.json").write_text("[")
    assert fit(whistler).codes == ["E609"]


def test_what_a_person_reads_fits_eighty_columns(whistler: Whistler, results: Path) -> None:
    run = fit(whistler, "--trace", "3", "--drop", "5000:6000", "--points", "--out", "edited")
    lines = run.out.splitlines()
    assert max(map(len, lines)) <= 80
    assert lines[0] == NAME
    assert "edits   drop 5000 to 6000 Hz, trace 3" in lines
    count = sum(len(row["trace"]["time_s"]) for row in stored(results.parent / "edited", 1))
    listed = lines[lines.index("trace       Hz      time s     ± ms  resid ms") + 1 :]
    assert len(listed[: listed.index("")]) == count
    assert lines[-1] == "saved in edited: catalogue.csv"


def test_picks_are_edited(whistler: Whistler, tmp_path: Path) -> None:
    """Recovery: points of L 3 and 900 cm^-3 that predict made, rounded to 1 us, one 50 ms off."""
    chosen = ",".join(str(hz) for hz in range(2000, 11_001, 1500))
    path = ("predict", "--l", "3", "--density", "900", "--frequencies", chosen, "--json")
    times_s = json.loads(whistler(*path).out)["time_s"]
    lines = [f"{hz},{time}" for hz, time in zip(chosen.split(","), times_s, strict=True)]
    wrong = f"{chosen.split(',')[2]},{times_s[2] + 0.05}"
    text = "\n".join(["frequency_hz,time_s", *lines[:2], wrong, *lines[3:]])
    (tmp_path / "p.csv").write_text(text)
    command = ("fit", "p.csv", "--lightning-time", "0", "--json")
    (kept,) = rows_in(whistler(*command).out)
    run = whistler(*command, "--move", lines[2].replace(",", ":"))
    (moved,) = rows_in(run.out)
    assert abs(moved["l_value"] - 3.0) < 0.05 * moved["l_value_sd"]
    assert ("edited" in kept["flags"], "edited" in moved["flags"]) == (False, True)
    edits = json.loads(run.out)["settings"]["options"]["edits"]
    assert edits == [f"move,{lines[2]},0.005,"]
    assert (tmp_path / "p.csv").read_text() == text
    for option in (["--group", "1"], ["--free-time"], ["--recording", "x"]):
        assert whistler("fit", "p.csv", *option).codes == ["E605"]
