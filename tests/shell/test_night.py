"""A folder of recordings: one catalogue, resumable, one run at a time."""

from __future__ import annotations

import fcntl
import hashlib
import json
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from shell_helpers import MESSAGE, STUB, Whistler, noise, table, write

NIGHT = ("night", "audio", "--out", "out")


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Three recordings whose names sort otherwise than their times, and things to leave alone."""
    audio = tmp_path / "audio"
    (audio / "late").mkdir(parents=True)
    write(audio / "z_20250314T020000Z.wav", noise(seed=1))
    write(audio / "a_20250314T030000Z.flac", noise(seed=2))
    write(audio / "late" / "20250314T040000Z.wav", noise(seed=3))
    (audio / "notes.txt").write_text("windy")
    (audio / ".hidden.wav").write_text("being copied")
    return audio


def digest(out: Path) -> dict[str, str]:
    return {
        path.name: hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(out.iterdir())
        if path.is_file()
    }


def test_one_catalogue_in_time_order(whistler: Whistler, folder: Path) -> None:
    run = whistler(*NIGHT)
    assert (run.code, run.err) == (0, "")
    assert run.out == "3 recordings, 6 whistlers: out/catalogue.csv\n"
    out = folder.parent / "out"
    assert sorted(digest(out)) == [
        "catalogue.csv",
        "catalogue.csv.meta.json",
        "catalogue.jsonl",
        "run.json",
    ]
    rows = table(out / "catalogue.csv")
    assert [row["recording"] for row in rows[::2]] == [
        "audio/z_20250314T020000Z.wav",
        "audio/a_20250314T030000Z.flac",
        "audio/late/20250314T040000Z.wav",
    ]


def test_again_does_nothing(whistler: Whistler, folder: Path) -> None:
    assert whistler(*NIGHT).code == 0
    out = folder.parent / "out"
    before = {path: path.stat().st_mtime_ns for path in out.rglob("*") if path.is_file()}
    run = whistler(*NIGHT)
    assert (run.code, run.codes) == (0, ["N402"])
    after = {path: path.stat().st_mtime_ns for path in out.rglob("*") if path.is_file()}
    assert {path.name for path in after if after[path] != before.get(path)} <= {"lock"}


def test_json_after_resuming_is_that_of_a_fresh_run(whistler: Whistler, folder: Path) -> None:
    """Identity: values that went through the saved results are the same values."""
    fresh = whistler(*NIGHT, "--json")
    again = whistler(*NIGHT, "--json")
    assert json.loads(fresh.out) == json.loads(again.out)
    assert len(json.loads(fresh.out)["whistlers"]) == 6


def test_changes_are_measured_again(whistler: Whistler, folder: Path) -> None:
    assert whistler(*NIGHT).code == 0
    write(folder / "z_20250314T020000Z.wav", noise(3.0))
    run = whistler(*NIGHT)
    assert (run.code, run.codes) == (0, ["N501"])
    run = whistler(*NIGHT, "--max-hops", "3")
    assert (run.code, run.codes) == (0, ["N501"] * 3)
    saved = sorted((folder.parent / "out/.work").glob("*.json"))
    saved[0].write_text('{"key": 7')
    saved[1].write_text('{"key": {}, "entry": {"recording": {}}, "refusal": null}')
    run = whistler(*NIGHT, "--max-hops", "3")
    assert (run.code, run.codes) == (0, ["W501", "W501"])


def test_bad_recordings_are_named_and_the_rest_done(whistler: Whistler, folder: Path) -> None:
    (folder / "empty.wav").touch()
    write(folder / "fault.wav")
    run = whistler(*NIGHT)
    assert (run.code, sorted(run.codes)) == (70, ["E102", "E701"])
    (folder / "fault.wav").unlink()
    run = whistler(*NIGHT)
    assert (run.code, run.codes) == (3, ["N402"])
    record = json.loads((folder.parent / "out/run.json").read_text())
    assert [item["path"] for item in record["refused"]] == ["audio/empty.wav"]


def test_results_inside_the_folder_are_no_input(whistler: Whistler, folder: Path) -> None:
    inside = ("night", "audio", "--out", "audio/out")
    assert whistler(*inside).code == 0
    write(folder / "out" / "x.wav")
    assert whistler(*inside).codes == ["N402"]


def test_an_empty_folder(whistler: Whistler, tmp_path: Path) -> None:
    (tmp_path / "audio").mkdir()
    run = whistler(*NIGHT)
    assert run.code == 4
    assert run.codes == ["E115"]


def test_interrupted_and_resumed_gives_the_same_bytes(whistler: Whistler, folder: Path) -> None:
    """Identity: the catalogue of an interrupted night equals that of one left alone."""
    write(folder / "interrupt_20250314T023000Z.wav")
    run = whistler(*NIGHT)
    assert (run.code, run.codes) == (130, ["N401"])
    assert "1 of 4 recordings done; run the same command again to go on" in run.err
    rows = (folder.parent / "out/catalogue.csv").read_text().splitlines()
    assert len(rows) == 1 + 2
    assert whistler(*NIGHT, STUB_CALM="1").code == 0
    resumed = digest(folder.parent / "out")
    assert whistler("night", "audio", "--out", "fresh", STUB_CALM="1").code == 0
    assert digest(folder.parent / "fresh") == resumed


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP, signal.SIGKILL])
def test_killed_and_resumed_gives_the_same_bytes(
    whistler: Whistler, folder: Path, number: signal.Signals
) -> None:
    """Identity: as above, for signals from outside while the second recording is measured."""
    write(folder / "slow_20250314T023000Z.wav")
    process = subprocess.Popen(
        [sys.executable, str(STUB), *NIGHT],
        cwd=folder.parent,
        env={"STUB_SLOW_S": "30", "PATH": ""},
        stderr=subprocess.PIPE,
    )
    deadline = time.monotonic() + 30
    while not list(folder.parent.glob("out/.work/*.json")) and time.monotonic() < deadline:
        time.sleep(0.02)
    time.sleep(0.2)
    process.send_signal(number)
    err = process.communicate(timeout=30)[1].decode()
    assert process.returncode == (-number if number == signal.SIGKILL else 128 + number)
    assert all(MESSAGE.match(line) for line in err.splitlines())
    assert whistler(*NIGHT, STUB_SLOW_S="0").code == 0
    assert whistler("night", "audio", "--out", "fresh", STUB_SLOW_S="0").code == 0
    assert digest(folder.parent / "fresh") == digest(folder.parent / "out")
    assert list((folder.parent / "out").glob(".*.part")) == []


def test_one_run_at_a_time(whistler: Whistler, folder: Path) -> None:
    work = folder.parent / "out" / ".work"
    work.mkdir(parents=True)
    with (work / "lock").open("w") as lock:
        fcntl.lockf(lock, fcntl.LOCK_EX)
        run = whistler(*NIGHT)
        assert (run.code, run.codes, run.out) == (75, ["E403"], "")
    assert whistler(*NIGHT).code == 0
