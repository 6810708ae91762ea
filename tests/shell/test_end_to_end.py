"""The command line with the real analysis behind it, on a demo recording."""

from __future__ import annotations

import dataclasses
import json
import subprocess
import sys
from pathlib import Path

import stub_measure
from shell_helpers import checked, table

from whistler.measure import Measurement

DEMO = "demo_recordings/skarnmoor_20250314T020000Z_paths.flac"
ROOT = Path(__file__).parents[2]


def test_a_demo_recording_from_file_to_catalogue(tmp_path: Path) -> None:
    """Recovery, coarse: as many paths as the truth file holds, each within 10 % in L of a true one.

    How good the numbers are is measured elsewhere; this is that everything is joined up."""
    program = "from whistler.cli import main; main()"
    process = subprocess.run(
        [sys.executable, "-c", program, "measure", DEMO, "--json", "--out", tmp_path],
        cwd=ROOT,
        capture_output=True,
        timeout=120,
        check=False,
    )
    run = checked(process)
    assert (run.code, run.err) == (0, "")
    rows = json.loads(run.out)["whistlers"]
    truth = json.loads((ROOT / DEMO).with_suffix(".truth.json").read_text())
    true_values = [whistler["l_value"] for whistler in truth["whistlers"]]
    assert len(rows) == len(true_values)
    for row in rows:
        assert min(abs(row["l_value"] / value - 1) for value in true_values) < 0.1
        assert row["time"].startswith("2025-03-14T02:00:")
        assert len(row["trace"]["frequency_hz"]) >= 3
    assert [row["recording"] for row in table(tmp_path / "catalogue.csv")] == [DEMO] * len(rows)
    assert (tmp_path / Path(DEMO).name).with_suffix(".png").stat().st_size > 10_000


def test_the_stand_in_looks_like_the_real_thing() -> None:
    real, stub = (
        {field.name for field in dataclasses.fields(kind)}
        for kind in (Measurement, stub_measure.Measurement)
    )
    assert stub <= real
