"""The catalogue's files and documents."""

from __future__ import annotations

import csv
import io
import json
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from stub_measure import measure_recording

from whistler import catalogue
from whistler.errors import OutputError
from whistler.recording import open_recording
from whistler.rows import COLUMNS, WhistlerRow, plain
from whistler.savefile import write_whole
from whistler.settings import Settings

# The keys of a row as users and scripts rely on them, in order, written out here once more.
CONTRACT = (
    "recording group sferic_time_s sferic_time_sd_s sferic_seen sferic_probability "
    "lightning_time_s time hops hop_probability l_value l_value_sd l_value_profile_sd "
    "l_value_low l_value_high equatorial_density_cm3 "
    "equatorial_density_sd_cm3 equatorial_density_profile_sd_cm3 equatorial_density_low_cm3 "
    "equatorial_density_high_cm3 l_density_correlation density_exponent fo_f2_mhz "
    "dispersion_s_sqrt_hz nose_frequency_hz nose_time_s equatorial_gyrofrequency_hz "
    "tube_content_m2 tube_content_sd_m2 tube_content_profile_sd_m2 frequency_low_hz "
    "frequency_high_hz snr_db significance fit_rms_s "
    "centre_share_sd uncertainty_status flags"
)


def strict(text: str) -> Any:
    def refuse(name: str) -> None:
        raise ValueError(f"bare {name}")

    return json.loads(text, parse_constant=refuse)


@pytest.fixture
def entry(wav: Path) -> catalogue.Entry:
    recording = open_recording(wav)
    return catalogue.entry(measure_recording(recording, Settings()))


def test_columns_and_fields_are_those_agreed() -> None:
    assert [column.name for column in COLUMNS] == CONTRACT.split()
    assert list(WhistlerRow.__dataclass_fields__) == [*CONTRACT.split(), "trace"]


def test_undetermined_is_null_in_json_and_empty_in_csv(entry: catalogue.Entry) -> None:
    document = strict(catalogue.json_text(catalogue.document([entry], Settings())))
    good, empty = document["whistlers"]
    assert list(good) == [*CONTRACT.split(), "trace"]
    assert (good["l_value"], good["l_value_sd"], good["sferic_seen"]) == (3.0, 0.0123457, True)
    assert empty["l_value"] is None
    assert empty["trace"] == {"frequency_hz": [], "time_s": [], "time_sd_s": []}
    rows = list(csv.DictReader(io.StringIO(catalogue.catalogue_csv(document["whistlers"]))))
    assert list(rows[0]) == CONTRACT.split()
    assert (rows[0]["l_value"], rows[0]["sferic_seen"], rows[0]["flags"]) == (
        "3.0",
        "true",
        "faint cut",
    )
    assert (rows[1]["l_value"], rows[1]["time"]) == ("", "")
    for row, values in zip(rows, document["whistlers"], strict=True):
        for column in COLUMNS:
            if column.type == "double":
                number = float(row[column.name]) if row[column.name] else None
                assert number == values[column.name]


def test_a_bare_nan_never_leaves(entry: catalogue.Entry) -> None:
    with pytest.raises(ValueError, match="not JSON compliant"):
        catalogue.json_text({"x": float("nan")})
    assert plain(np.float32("nan")) is None
    assert plain(float("inf")) is None
    assert plain(np.int64(3)) == 3
    assert plain(-0.0000000001, decimals=6) == 0.0


@pytest.mark.parametrize("first", ["=", "+", "-", "@", "\t", "\r"])
def test_no_cell_is_a_formula(entry: catalogue.Entry, first: str) -> None:
    """Reference: common practice against formula injection; numbers stay numbers."""
    row = {**entry.whistlers[0], "recording": first + "cmd|x", "sferic_time_s": -1.5}
    text = catalogue.catalogue_csv([row])
    back = next(csv.DictReader(io.StringIO(text, newline="")))
    assert back["recording"] == "'" + first + "cmd|x"
    assert back["sferic_time_s"] == "-1.5"


def test_the_sidecar_is_shaped_like_hapi_info(entry: catalogue.Entry) -> None:
    """Reference: HAPI data access specification 3.3, section 3.6: info and its parameters."""
    info = strict(catalogue.json_text(catalogue.sidecar(entry.whistlers)))
    assert info["HAPI"] == "3.3"
    assert info["status"] == {"code": 1200, "message": "OK"}
    names = [parameter["name"] for parameter in info["parameters"]]
    assert names == CONTRACT.split()
    for parameter in info["parameters"]:
        assert parameter["type"] in ("string", "double", "integer", "isotime")
        assert parameter["units"] != ""
        assert "fill" in parameter
        assert parameter["description"]
        if parameter["type"] in ("string", "isotime"):
            assert parameter["length"] >= 1
        else:
            assert parameter["units"] is not None, "a number without unit is 'dimensionless'"
    units = {parameter["name"]: parameter["units"] for parameter in info["parameters"]}
    assert (units["time"], units["snr_db"], units["l_value"], units["recording"]) == (
        "UTC",
        "dB",
        "dimensionless",
        None,
    )


def test_four_files_and_nothing_else(tmp_path: Path, entry: catalogue.Entry) -> None:
    out = tmp_path / "out"
    out.mkdir()
    assert catalogue.write_catalogue(out, [entry], settings=Settings())
    assert sorted(path.name for path in out.iterdir()) == sorted(catalogue.CATALOGUE_FILES)
    lines = (out / "catalogue.jsonl").read_text().splitlines()
    assert [strict(line)["group"] for line in lines] == [1, 2]
    assert strict(lines[0])["trace"]["time_s"] == [2.5, 2.25, 2.125]
    record = strict((out / "run.json").read_text())
    assert record["inputs"][0]["frames"] == 32_000
    assert record["inputs"][0]["live_time_s"] == 2.0
    assert record["settings"] == Settings().to_dict()
    assert set(record["software"]) == {"whistler", "python", "numpy", "scipy"}
    (out / "catalogue.csv").chmod(0o600)
    before = {path: path.stat().st_mtime_ns for path in out.iterdir()}
    assert not catalogue.write_catalogue(out, [entry], settings=Settings())
    assert {path: path.stat().st_mtime_ns for path in out.iterdir()} == before


def test_the_digest_is_that_of_the_file(wav: Path, entry: catalogue.Entry) -> None:
    """Reference: hashlib of the standard library over the whole file."""
    import hashlib

    assert entry.provenance["sha256"] == hashlib.sha256(wav.read_bytes()).hexdigest()


def test_a_catalogue_of_something_else_is_not_replaced(
    tmp_path: Path, entry: catalogue.Entry
) -> None:
    out = tmp_path / "out"
    path = entry.recording["path"]
    catalogue.prepare_output(out, paths=[path], settings=Settings())
    catalogue.write_catalogue(out, [entry], settings=Settings())
    catalogue.prepare_output(out, paths=[path], settings=Settings())
    for paths, settings in (([path], Settings(max_hops=2)), (["other.wav"], Settings())):
        with pytest.raises(OutputError, match=r"E402 .*give --overwrite"):
            catalogue.prepare_output(out, paths=paths, settings=settings)
        catalogue.prepare_output(out, paths=paths, settings=settings, overwrite=True)
    (out / "run.json").write_text("[")
    with pytest.raises(OutputError, match=r"E402 "):
        catalogue.prepare_output(out, paths=[path], settings=Settings())


def test_a_failed_write_leaves_the_old_file_and_no_litter(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    target = tmp_path / "x.txt"
    target.write_bytes(b"old")

    def full(descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OutputError, match=r"E401 .*No space left on device"):
        write_whole(target, b"new")
    assert target.read_bytes() == b"old"
    assert list(tmp_path.iterdir()) == [target]


def test_a_link_is_replaced_not_followed(tmp_path: Path) -> None:
    victim = tmp_path / "victim"
    victim.write_bytes(b"mine")
    (tmp_path / "x.txt").symlink_to(victim)
    write_whole(tmp_path / "x.txt", b"new")
    assert victim.read_bytes() == b"mine"
    assert (tmp_path / "x.txt").read_bytes() == b"new"


def test_readme_lists_codes_and_columns() -> None:
    from whistler.errors import CODES

    readme = Path(__file__).parents[2].joinpath("README.md").read_text()
    rows = {line.split("|")[1].strip(" `"): line for line in readme.splitlines() if "|" in line}
    assert {code for code, meaning in CODES.items() if meaning not in rows.get(code, "")} == set()
    lacking = [
        column.name for column in COLUMNS if column.description not in rows.get(column.name, "")
    ]
    assert lacking == []
