"""The command line from outside: exit codes, one-line messages, what stands on which stream."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from shell_helpers import STUB, Whistler, noise, table, write

from whistler import __version__


def test_a_good_recording(whistler: Whistler, wav: Path) -> None:
    run = whistler("measure", wav.name)
    assert (run.code, run.err) == (0, "")
    assert wav.name in run.out
    assert "2025-03-14T02:15:00.000Z" in run.out
    assert "3.000  0.012" in run.out
    assert max(map(len, run.out.splitlines())) <= 80


def test_json_is_one_document_and_nothing_else(whistler: Whistler, wav: Path) -> None:
    (wav.parent / "empty.wav").touch()
    run = whistler("measure", wav.name, "empty.wav", "--json")
    assert run.code == 3
    document = json.loads(run.out)
    assert list(document) == ["schema", "software", "settings", "recordings", "whistlers"]
    assert document["schema"] == 1
    assert document["software"] == {"name": "whistler", "version": __version__}
    assert document["recordings"] == [
        {
            "path": wav.name,
            "start_time": "2025-03-14T02:15:00.000Z",
            "duration_s": 2.0,
            "sample_rate_hz": 16_000,
            "channels": 1,
            "false_alarms_per_hour": None,
            "notices": [],
        }
    ]
    assert [row["group"] for row in document["whistlers"]] == [1, 2]


def test_one_bad_file_does_not_cost_the_others(whistler: Whistler, wav: Path) -> None:
    """Every kind of bad file in one call: each named once, the good ones measured and saved."""
    folder = wav.parent
    (folder / "empty.wav").touch()
    (folder / "text.wav").write_text("only words\n" * 99)
    (folder / "text.au").write_text("only words\n" * 9999)
    write(folder / "short.wav", noise(0.2))
    (folder / "cut.wav").write_bytes(wav.read_bytes()[:50_000])
    os.mkfifo(folder / "pipe.wav")
    write(folder / "fault.wav")
    bad = ["absent.wav", "empty.wav", "text.wav", "text.au", "short.wav", "pipe.wav"]
    run = whistler("measure", *bad, wav.name, "cut.wav", "--out", "out")
    assert run.code == 3
    assert run.codes == ["E101", "E102", "E102", "E102", "E107", "E113", "W104", "N301"]
    for name in bad:
        assert run.err.count(f'"{name}"') == 1
    rows = table(folder / "out/catalogue.csv")
    assert [row["recording"] for row in rows] == [wav.name] * 2 + ["cut.wav"] * 2
    record = json.loads((folder / "out/run.json").read_text())
    assert [item["path"] for item in record["refused"]] == bad
    figures = sorted(path.name for path in (folder / "out").glob("*.png"))
    assert figures == ["cut.png", f"{wav.stem}.png"]


def test_nothing_usable(whistler: Whistler) -> None:
    run = whistler("measure", "absent.wav", "--json")
    assert run.code == 4
    assert json.loads(run.out)["recordings"] == []


def test_an_internal_fault_leaves_a_record_and_the_others(whistler: Whistler, wav: Path) -> None:
    write(wav.parent / "fault.wav")
    run = whistler("measure", "fault.wav", wav.name, "--out", "out", TMPDIR=str(wav.parent))
    assert run.code == 70
    assert run.codes == ["E701"]
    record = next(wav.parent.glob("whistler-fault-*.txt"))
    assert str(record) in run.err
    assert "RuntimeError: planted" in record.read_text()
    assert wav.name in (wav.parent / "out/catalogue.csv").read_text()


def test_what_the_physics_refuses_is_a_refusal_not_a_fault(whistler: Whistler, wav: Path) -> None:
    write(wav.parent / "domain.wav")
    run = whistler("measure", "domain.wav", wav.name)
    assert (run.code, run.codes) == (3, ["E301"])


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (["measure"], "Missing argument"),
        (["mesure", "x.wav"], "No such command"),
        (["measure", "x.wav", "--wrong"], "No such option"),
        (["measure", "x.wav", "--max-hops", "many"], "'--max-hops'"),
        (["measure", "x.wav", "--max-hops", "0"], "max_hops=0 is outside 1 to 8"),
        (["measure", "x.wav", "--false-alarms", "nan"], "false_alarms_per_hour=nan is outside"),
        (["measure", "x.wav", "--channel", "0"], "channel=0"),
        (["measure", "x.wav", "--channel", "left"], "channel=left"),
        (["measure", "x.wav", "--start", "noon"], "not an ISO 8601 time"),
        (["measure", "x.wav", "y.wav", "--start", "2025-03-14"], "one start time for 2"),
        (["measure", "x.wav", "--station", "absent.toml"], "cannot be read (No such file"),
        (["measure", "x.wav", "--station", "bad.toml"], "did you mean 'mains_hz'"),
        (["night", "absent", "--out", "o"], "not a folder"),
        (["night", "."], "Missing option"),
        (["fit", "absent.csv"], "cannot be read"),
        (["predict", "--l", "3"], "Missing option"),
        (["predict", "--l", "0.5", "--density", "900"], "l_value=0.5 is outside"),
        (["predict", "--l", "3", "--density", "-1"], "equatorial_density_m3=-1000000 is outside"),
        (["predict", "--l", "3", "--density", "9", "--hops", "0"], "0 is outside 1 to 20"),
        (["predict", "--l", "3", "--density", "9", "--frequencies", "a,b"], "not a list of num"),
        (["predict", "--l", "3", "--density", "9", "--frequencies", "99000"], "is outside"),
        (["predict", "--l", "3", "--density", "9", "--date", "1066-10-14"], "is outside"),
        (["predict", "--l", "3", "--density", "9", "--figure", "x.doc"], "ending '.doc'"),
    ],
)
def test_wrong_use(whistler: Whistler, tmp_path: Path, arguments: list[str], word: str) -> None:
    """One line that says what is wrong; exit code 2; nothing on standard output."""
    (tmp_path / "bad.toml").write_text("mains = 50\n")
    run = whistler(*arguments)
    assert run.code == 2
    assert run.out == ""
    assert len(run.err.splitlines()) == 1
    assert word in run.err


def test_an_output_folder_below_a_file(whistler: Whistler, wav: Path) -> None:
    """Refused before anything is analysed: the planted fault does not come up."""
    fault = write(wav.parent / "fault.wav")
    for command in (["measure", fault.name], ["night", "."]):
        run = whistler(*command, "--out", f"{wav.name}/out")
        assert (run.code, run.codes, run.out) == (74, ["E401"], "")
    run = whistler("predict", "--l", "3", "--density", "900", "--figure", f"{wav.name}/x.png")
    assert (run.code, run.codes) == (74, ["E401"])


def test_another_catalogue_is_left_alone(whistler: Whistler, wav: Path) -> None:
    assert whistler("measure", wav.name, "--out", "out").code == 0
    before = (wav.parent / "out/catalogue.csv").read_bytes()
    assert whistler("measure", wav.name, "--out", "out").code == 0
    other = write(wav.parent / "other.wav")
    run = whistler("measure", other.name, "--out", "out")
    assert (run.code, run.codes) == (74, ["E402"])
    run = whistler("night", ".", "--out", "out")
    assert (run.code, run.codes) == (74, ["E402"])
    assert (wav.parent / "out/catalogue.csv").read_bytes() == before
    assert whistler("measure", other.name, "--out", "out", "--overwrite").code == 0
    assert "other.wav" in (wav.parent / "out/catalogue.csv").read_text()


def test_figures_of_like_names_do_not_meet(whistler: Whistler, wav: Path) -> None:
    for folder in ("a", "b"):
        (wav.parent / folder).mkdir()
        write(wav.parent / folder / "x.wav")
    assert whistler("measure", "a/x.wav", "b/x.wav", "--out", "out").code == 0
    assert (wav.parent / "out/x.png").read_text() == "figure of a/x.wav"
    assert (wav.parent / "out/x-2.png").read_text() == "figure of b/x.wav"
    assert whistler("measure", wav.name, "--out", "two", "--no-figures").code == 0
    assert list((wav.parent / "two").glob("*.png")) == []


def test_a_figure_that_fails_does_not_cost_the_numbers(whistler: Whistler, wav: Path) -> None:
    write(wav.parent / "nofigure.wav")
    run = whistler("measure", "nofigure.wav", wav.name, "--out", "out", "--quiet")
    assert (run.code, run.codes) == (70, ["E701"])
    rows = table(wav.parent / "out/catalogue.csv")
    assert {row["recording"] for row in rows} == {"nofigure.wav", wav.name}
    assert len(list((wav.parent / "out").glob("*.png"))) == 1


def test_poor_signals_are_measured_and_told(whistler: Whistler, tmp_path: Path) -> None:
    spoilt = noise()
    spoilt[[10, 20], 0] = [np.nan, np.inf]
    write(tmp_path / "nan.wav", spoilt, subtype="FLOAT")
    write(tmp_path / "clipped.wav", noise() * 20, subtype="PCM_16")
    write(tmp_path / "silent.wav", np.zeros((32_000, 1), np.float32))
    pair = noise(channels=2)
    pair[:, 1] = 0
    write(tmp_path / "pair.wav", pair)
    names = ["nan.wav", "clipped.wav", "silent.wav", "pair.wav"]
    run = whistler("measure", *names, "--json", "--start", "2025-03-14T02:00:00Z")
    assert run.code == 2  # one start time for four recordings
    run = whistler("measure", *names, "--json")
    assert run.code == 0
    told = {item["path"]: item["notices"] for item in json.loads(run.out)["recordings"]}
    for name, code in zip(names, ["W201", "W202", "W206", "W207"], strict=True):
        assert any(code in notice for notice in told[name]), name
        assert any(code in line and name in line for line in run.err.splitlines())


def test_quiet_leaves_only_errors(whistler: Whistler, tmp_path: Path) -> None:
    write(tmp_path / "silent.wav", np.zeros((32_000, 1), np.float32))
    run = whistler("measure", "silent.wav", "absent.wav", "--quiet")
    assert (run.code, run.codes) == (3, ["E101"])


def test_channels_by_number_and_name(whistler: Whistler, tmp_path: Path) -> None:
    write(tmp_path / "pair.wav", noise(channels=2))
    (tmp_path / "s.toml").write_text('[audio]\nchannels = ["NS", "EW"]\n')
    for channel in ("2", "EW", "mean"):
        run = whistler("measure", "pair.wav", "--station", "s.toml", "--channel", channel, "--json")
        assert run.code == 0
        stored = json.loads(run.out)["settings"]["channel"]
        assert stored == ("mean" if channel == "mean" else 2)
    run = whistler("measure", "pair.wav", "--channel", "3")
    assert (run.code, run.codes) == (4, ["E114"])


@pytest.mark.parametrize("name", [b"bad\xff.wav", b"a\nb\x1b[31m.wav", "жук.wav".encode()])
@pytest.mark.parametrize("encoding", ["utf-8", "ascii"])
def test_odd_names_on_every_terminal(
    whistler: Whistler, wav: Path, name: bytes, encoding: str
) -> None:
    path = os.fsencode(wav.parent) + b"/" + name
    Path(os.fsdecode(path)).write_bytes(wav.read_bytes())
    run = whistler("measure", name, "--out", "out", PYTHONIOENCODING=encoding)
    assert run.code == 0
    assert run.codes == ["N301"]
    line = (wav.parent / "out/catalogue.jsonl").read_text().splitlines()[0]
    assert os.fsencode(json.loads(line)["recording"]) == name
    assert len(table(wav.parent / "out/catalogue.csv")) == 2


def test_a_reader_that_has_seen_enough(wav: Path) -> None:
    command = [sys.executable, str(STUB), "measure", wav.name]
    process = subprocess.Popen(
        command, cwd=wav.parent, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert process.stdout is not None
    process.stdout.close()
    _, err = process.communicate(timeout=60)
    assert (process.returncode, err) == (0, b"")


def test_a_full_disk_under_standard_output(wav: Path) -> None:
    with Path("/dev/full").open("wb") as full:
        process = subprocess.run(
            [sys.executable, str(STUB), "predict", "--l", "3", "--density", "900"],
            stdout=full,
            stderr=subprocess.PIPE,
            timeout=60,
            check=False,
        )
    assert process.returncode == 74
    assert process.stderr.decode().startswith('error E401 "output": cannot be written (No space')


def test_stopped_by_the_user_keeps_what_is_done(whistler: Whistler, wav: Path) -> None:
    write(wav.parent / "interrupt.wav")
    run = whistler("measure", wav.name, "interrupt.wav", "--out", "out")
    assert (run.code, run.codes) == (130, ["N401"])
    assert wav.name in (wav.parent / "out/catalogue.csv").read_text()


def test_verbose_shows_the_traceback(wav: Path) -> None:
    write(wav.parent / "x.wav")
    process = subprocess.run(
        [sys.executable, str(STUB), "fit", "absent.csv", "--verbose"],
        capture_output=True,
        timeout=60,
        check=False,
    )
    assert b"Traceback" in process.stderr


def test_version(whistler: Whistler) -> None:
    run = whistler("--version")
    assert (run.code, run.out) == (0, f"whistler {__version__}\n")


@pytest.mark.parametrize("flag", ["--help", "-h"])
@pytest.mark.parametrize("command", [[], ["measure"], ["night"], ["fit"], ["predict"]])
def test_help_fits_eighty_columns(whistler: Whistler, command: list[str], flag: str) -> None:
    run = whistler(*command, flag)
    assert run.code == 0
    assert max(map(len, run.out.splitlines())) <= 80
    assert "\x1b" not in run.out


HEAVY = ("numba", "scipy", "matplotlib", "soundfile", "librosa", "numpy", "pandas")


def test_help_loads_nothing_heavy() -> None:
    program = (
        "import sys; from whistler.cli import run; code = run(['measure', '--help']);"
        f"print(code, sorted(set(sys.modules) & set({HEAVY})), file=sys.stderr)"
    )
    process = subprocess.run([sys.executable, "-c", program], capture_output=True, check=True)
    assert process.stderr.decode().strip() == "0 []"


def test_help_comes_at_once() -> None:
    """Help takes at most three times what importing typer takes; best of five on a busy machine."""

    def best_s(*arguments: str) -> float:
        times = []
        for _ in range(5):
            begin = time.perf_counter()
            subprocess.run([sys.executable, *arguments], capture_output=True, check=True)
            times.append(time.perf_counter() - begin)
        return min(times)

    run = "import sys; sys.argv = ['whistler', '--help']; from whistler.cli import main; main()"
    assert best_s("-c", run) <= 3 * best_s("-c", "import typer")
