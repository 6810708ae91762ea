"""The whole way: a folder in; table, JSON, CSV and figure out; the folder as it was."""

from __future__ import annotations

import csv
import hashlib
import json
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
import soundfile

from whistler.cli import run
from whistler.completeness import Request
from whistler.errors import UsageError
from whistler.pieces import Piece, plan_pieces
from whistler.recording import open_recording
from whistler.synthesis.files import flac_bytes
from whistler.synthesis.quick import quick_scene
from whistler.synthesis.render import render

NAME = "amber_20250314T023000Z.flac"
WHISTLERS = 8


@dataclass(frozen=True)
class Outcome:
    code: int
    out: str
    err: str

    @property
    def codes(self) -> list[str]:
        return [line.split()[1] for line in self.err.splitlines()]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """One recording of 22 s with one strong whistler in it, and something that is none."""
    place = tmp_path_factory.mktemp("audio")
    scene = quick_scene(
        3.0,
        equatorial_density_cm3=900.0,
        snr_db=20.0,
        duration_s=22.0,
        sferic_rate_hz=5.0,
        sample_rate_hz=16_000,
    )
    high_hz = 6500.0  # what 16 kHz carry
    path = replace(scene.strokes[0].paths[0], frequency_high_hz=high_hz)
    scene = replace(scene, strokes=(replace(scene.strokes[0], paths=(path,)),))
    (place / NAME).write_bytes(flac_bytes(render(scene)))
    (place / "notes.txt").write_text("windy")
    return place


def completeness(
    capsys: pytest.CaptureFixture[str], *arguments: str | Path, injections: int = WHISTLERS
) -> Outcome:
    """Run the command line here, with strengths far below and far above the threshold."""
    command = ["completeness", *map(str, arguments), "--injections", str(injections)]
    if "--snr-range" not in command:
        command += ["--snr-range", "-16", "24"]
    code = run(command)
    captured = capsys.readouterr()
    return Outcome(code, captured.out, captured.err)


def digests(place: Path) -> dict[str, str]:
    return {path.name: hashlib.sha256(path.read_bytes()).hexdigest() for path in place.iterdir()}


def test_strong_ones_are_found_weak_ones_are_not(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Recovery: of whistlers of -16 to 24 dB all over 12 dB are found and none under -6 dB, far
    from the threshold of any search. The same command gives the same bytes, and the recordings
    keep theirs."""
    before = digests(folder)
    outcome = completeness(capsys, folder, "--out", tmp_path / "a", "--json")
    assert (outcome.code, outcome.err) == (0, "")
    assert digests(folder) == before
    document = json.loads(outcome.out)
    check_document(document)
    with (tmp_path / "a" / "completeness.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == WHISTLERS
    strong = [row for row in rows if float(row["snr_db"]) > 12.0]
    weak = [row for row in rows if float(row["snr_db"]) < -6.0]
    assert strong and {row["found"] for row in strong} == {"true"}
    assert weak and {row["found"] for row in weak} == {"false"}
    for row in strong:
        assert float(row["time_error_s"]) < 0.03
        assert float(row["found_l_value"] or "nan") == pytest.approx(
            float(row["l_value"]), rel=0.2, nan_ok=True
        )
    check_found(strong, weak)
    assert all(row["time"].startswith("2025-03-14T02:30:") for row in rows)
    again = completeness(capsys, folder, "--out", tmp_path / "b", "--json")
    assert again.out == outcome.out
    assert digests(tmp_path / "a") == digests(tmp_path / "b")
    assert json.loads((tmp_path / "a" / "completeness.json").read_text()) == document


def check_found(strong: list[dict[str, str]], weak: list[dict[str, str]]) -> None:
    """Interval and flags of the rows found: those of the catalogue, empty where none was found."""
    for row in strong:
        assert ("diffuse" in row["found_flags"].split()) == (row["kind"] == "diffuse")
    determined = [row for row in strong if row["found_uncertainty_status"] == "ok"]
    assert determined
    for row in determined:
        low, high = float(row["found_l_value_low"]), float(row["found_l_value_high"])
        assert low < float(row["found_l_value"]) < high
    for row in weak:
        assert row["found_l_value_low"] == row["found_l_value_high"] == row["found_flags"] == ""


def check_document(document: dict) -> None:
    """What scripts can rely on."""
    assert document["schema"] == 1
    assert document["software"]["name"] == "whistler"
    assert document["settings"]["max_hops"] == 5
    assert document["request"] == {
        "injections": WHISTLERS,
        "seed": 1,
        "l_range": [2.2, 4.6],
        "snr_range_db": [-16.0, 24.0],
    }
    assert "30 ms" in document["definitions"]["found"]
    assert document["injected"] == WHISTLERS
    assert document["own_rows"]["count"] == 1
    assert document["own_rows"]["live_time_s"] == pytest.approx(22.0)
    assert document["false_alarms"]["live_time_s"] < 22.0 - 0.5  # without the whistler found
    tables = ("by_strength", "by_strength_thin", "by_strength_diffuse", "by_l", "by_hour")
    for name in tables:
        for item in document[name]:
            assert set(item) == {"low", "high", "injected", "found", "share", "interval"}
            assert (item["share"] is None) == (item["injected"] == 0)
    for name in ("by_strength", "by_l", "by_hour"):
        assert sum(item["injected"] for item in document[name]) == WHISTLERS
        assert sum(item["found"] for item in document[name]) == document["found"]
    assert [item["low"] for item in document["by_hour"]] == [2.0]
    found_at = document["strength_found"]
    assert [item["share"] for item in found_at["thin"]] == [0.5, 0.9]
    sides = {item["reached"] for kind in ("thin", "diffuse") for item in found_at[kind]}
    assert sides <= {"below", "within", "above", None}
    assert found_at["thin"][0]["reached"] == "within"
    for part in document["coverage"].values():
        assert set(part) == {"one_sigma", "1.96_sigma"}


@pytest.mark.parametrize(
    ("arguments", "code", "told"),
    [
        (("--snr-range", "5", "5"), 2, "E601"),
        (("--l-range", "1.2", "3"), 2, "E601"),
        (("--seed", "-1"), 2, "E601"),
        (("--out", "{folder}/results"), 2, "E605"),
        (("--out", "{folder}"), 2, "E605"),
        (("--out", "{folder}/notes.txt/x"), 2, "E605"),
        (("--out", "{place}/file/x"), 74, "E401"),
        (("--out", "{place}/taken"), 74, "E402"),
        (("--channel", "3"), 4, "E114"),
    ],
)
def test_what_cannot_be_done_is_one_line(
    folder: Path,
    tmp_path: Path,
    capsys: pytest.CaptureFixture[str],
    arguments: tuple[str, ...],
    code: int,
    told: str,
) -> None:
    (tmp_path / "file").touch()
    (tmp_path / "taken").mkdir()
    (tmp_path / "taken" / "completeness.json").write_text('{"request": {}}')
    before = digests(folder)
    filled = [text.format(folder=folder, place=tmp_path) for text in arguments]
    outcome = completeness(capsys, folder, *filled)
    assert (outcome.code, outcome.codes, outcome.out) == (code, [told], "")
    assert digests(folder) == before


def test_folders_without_recordings(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    outcome = completeness(capsys, tmp_path / "nowhere")
    assert (outcome.code, outcome.codes) == (2, ["E605"])
    outcome = completeness(capsys, tmp_path)
    assert (outcome.code, outcome.codes) == (4, ["E115"])
    for name in ("a.wav", "b.wav"):
        (tmp_path / name).write_text("no audio")
    outcome = completeness(capsys, tmp_path)
    assert (outcome.code, outcome.codes, outcome.out) == (4, ["E102", "E102"], "")
    outcome = completeness(capsys, tmp_path, "--start", "2025-03-14T02:00:00Z")
    assert (outcome.code, outcome.codes) == (2, ["E605"])


def test_bad_and_short_recordings_are_named_and_the_rest_used(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """A recording too short for any whistler takes none; with another that is none: exit code 3."""
    noise = 0.1 * np.random.default_rng(1).standard_normal((3, 16_000 * 9))
    soundfile.write(tmp_path / "good.wav", noise[0], 16_000)
    (tmp_path / "bad.wav").write_text("no audio")
    outcome = completeness(capsys, tmp_path, "--quiet", injections=1)
    assert (outcome.code, outcome.codes) == (3, ["E102"])
    assert "1 whistlers of -16 to 24 dB injected into 9 s of 1 recording\n" in outcome.out
    (tmp_path / "good.wav").unlink()
    soundfile.write(tmp_path / "short.wav", noise[1, : 16_000 * 2], 16_000)
    outcome = completeness(capsys, tmp_path, injections=1)
    assert (outcome.code, outcome.out) == (4, "")
    assert outcome.codes == ["E102", "N301", "E208"]


def test_silent_audio_is_an_error_even_when_quiet(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Identity: no whistler has a strength in silence; the exit code comes with a line."""
    soundfile.write(tmp_path / "silent.wav", np.zeros(16_000 * 20), 16_000)
    outcome = completeness(capsys, tmp_path, "--quiet", injections=2)
    assert (outcome.code, outcome.codes, outcome.out) == (4, ["E208"], "")
    assert "none of 2 whistlers could be injected" in outcome.err


def test_limits_of_whole_numbers_are_written_as_such() -> None:
    """Reference: 2**63 - 1 by its digits; the limits themselves are allowed."""
    assert Request(injections=100_000, seed=2**63 - 1).seed == 2**63 - 1
    with pytest.raises(UsageError, match=r"--seed.*-1 is outside 0 to 9223372036854775807;"):
        Request(seed=-1)
    with pytest.raises(UsageError, match=r"--injections.*100001 is outside 1 to 100000;"):
        Request(injections=100_001)


def test_pieces_of_a_night_are_spread_over_it() -> None:
    """Identity: 500 whistlers in 8 hours, one in 8 s: 4000 s, 25 of 180 pieces, evenly."""
    plan = plan_pieces([16_000 * 3600] * 8, rates_hz=[16_000] * 8, injections=500)
    assert sum(piece.quota for piece in plan) == 500
    at = np.array([piece.stream for piece in plan])
    assert (len(at), set(np.diff(at)) <= {7, 8}) == (26, True)
    assert {piece.quota for piece in plan} <= {18, 19, 20}
    assert max(piece.duration_s for piece in plan) <= 160.0


def test_little_audio_is_all_used() -> None:
    plan = plan_pieces([16_000 * 30, 16_000 * 400], rates_hz=[16_000] * 2, injections=500)
    assert [piece.duration_s for piece in plan] == pytest.approx(
        [30.0, 133.33, 133.33, 133.33], abs=0.01
    )
    assert sum(piece.quota for piece in plan) == 500
    assert plan_pieces([], rates_hz=[], injections=10) == ()


def test_pieces_are_dated_recordings_that_hold_the_audio(folder: Path) -> None:
    recording = open_recording(folder / NAME)
    blocks = list(recording.blocks(11.0))
    second = Piece.of(recording, blocks[1])
    assert second.start_time is not None
    assert second.start_time.isoformat() == "2025-03-14T02:30:11+00:00"
    (block,) = second.blocks(160.0, overlap_s=20.0)
    assert (block.first_frame, second.frame_count) == (0, 11 * 16_000)
    assert np.array_equal(block.samples, blocks[1].samples)
    assert second.path == recording.path
