"""Rows of results: their columns in one table, and the files and documents made of them."""

from __future__ import annotations

import csv
import hashlib
import io
import json
import platform
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from importlib import metadata
from pathlib import Path
from typing import Any, Protocol

from whistler import __version__
from whistler.clock import iso_time
from whistler.errors import Notice, OutputError
from whistler.recording import Recording
from whistler.rows import COLUMNS, TIME_DECIMALS, Column, WhistlerRow, plain, row_values
from whistler.savefile import prepare_folder, write_whole
from whistler.settings import Settings

__all__ = [
    "COLUMNS",
    "Column",
    "Entry",
    "Measured",
    "WhistlerRow",
    "catalogue_csv",
    "cell_text",
    "document",
    "entry",
    "json_text",
    "measurement_document",
    "picks_entry",
    "prepare_output",
    "run_record",
    "sidecar",
    "write_catalogue",
]

SCHEMA = 1
MISSING = ""


class Measured(Protocol):
    """What the writers need of a measurement."""

    @property
    def recording(self) -> Recording:
        """The recording."""

    @property
    def settings(self) -> Settings:
        """What it was measured with."""

    @property
    def rows(self) -> Sequence[WhistlerRow]:
        """The whistlers found."""

    @property
    def notices(self) -> Sequence[Notice]:
        """What else was noticed."""

    @property
    def false_alarms_per_hour(self) -> float:
        """False detections to expect."""


@dataclass(frozen=True)
class Entry:
    """One measured recording as plain values, ready for JSON; what a run saves and reads again.

    Parameters
    ----------
    recording : dict
        The recording's part of the document.
    whistlers : tuple of dict
        One for each row, keys as in :data:`COLUMNS` and ``trace``.
    provenance : dict
        What the run record says about the input.
    """

    recording: dict[str, Any]
    whistlers: tuple[dict[str, Any], ...]
    provenance: dict[str, Any]


def entry(measurement: Measured) -> Entry:
    """Return a measurement as plain values; undetermined numbers become None."""
    recording = measurement.recording
    notices = dict.fromkeys([*recording.notices, *measurement.notices])
    return Entry(
        recording={
            "path": recording.path,
            "start_time": iso_time(recording.start_time),
            "duration_s": plain(recording.duration_s, decimals=TIME_DECIMALS),
            "sample_rate_hz": recording.sample_rate_hz,
            "channels": recording.channels,
            "false_alarms_per_hour": plain(measurement.false_alarms_per_hour),
            "notices": [str(notice) for notice in notices],
        },
        whistlers=tuple(row_values(row) for row in measurement.rows),
        provenance={
            "path": recording.path,
            "sha256": recording.digest_sha256,
            "container": recording.container,
            "frames": recording.frame_count,
            "live_time_s": plain(recording.live_time_s, decimals=TIME_DECIMALS),
            "start_time_source": recording.start_time_source,
            "complete": recording.complete,
        },
    )


def picks_entry(path: str, rows: Sequence[WhistlerRow], *, start_time: datetime | None) -> Entry:
    """Return fitted picks as plain values; what only a recording has is None."""
    recording = {"path": path, "start_time": iso_time(start_time), "duration_s": None}
    return Entry(
        recording={**recording, "sample_rate_hz": None, "channels": None, "notices": []},
        whistlers=tuple(row_values(row) for row in rows),
        provenance={
            "path": path,
            "sha256": hashlib.sha256(Path(path).read_bytes()).hexdigest(),
            "complete": True,
        },
    )


def document(entries: Sequence[Entry], settings: Settings) -> dict[str, Any]:
    """Return the document that ``--json`` prints."""
    return {
        "schema": SCHEMA,
        "software": {"name": "whistler", "version": __version__},
        "settings": settings.to_dict(),
        "recordings": [item.recording for item in entries],
        "whistlers": [row for item in entries for row in item.whistlers],
    }


def measurement_document(measurements: Sequence[Measured], settings: Settings) -> dict[str, Any]:
    """Return the document that ``--json`` prints, from measurements."""
    return document([entry(measurement) for measurement in measurements], settings)


def json_text(value: Any, *, indent: int | None = None) -> str:
    """Return strict JSON, ASCII only; a bare NaN is refused.

    Raises
    ------
    ValueError
        When the value holds NaN or infinity.
    """
    return json.dumps(value, allow_nan=False, indent=indent)


def catalogue_csv(rows: Sequence[dict[str, Any]]) -> str:
    """Return the table as CSV (RFC 4180): one header line, empty where undetermined."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow([column.name for column in COLUMNS])
    for row in rows:
        writer.writerow([cell_text(row[column.name]) for column in COLUMNS])
    return out.getvalue()


def cell_text(value: Any) -> str:
    """Return a plain value as a cell of CSV; text that a spreadsheet would run is made harmless."""
    if value is None:
        return MISSING
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, list):
        return " ".join(value)
    if not isinstance(value, str):
        return repr(value)
    # spreadsheets run a cell that begins so as a formula
    return f"'{value}" if value[:1] in ("=", "+", "-", "@", "\t", "\r", "\n") else value


def sidecar(rows: Sequence[dict[str, Any]]) -> dict[str, Any]:
    """Return the description of the table, shaped like the ``info`` object of HAPI 3."""
    times = sorted(row["time"] for row in rows if row["time"])
    info: dict[str, Any] = {
        "HAPI": "3.3",
        "status": {"code": 1200, "message": "OK"},
        "format": "csv",
        "startDate": times[0] if times else None,
        "stopDate": times[-1] if times else None,
        "x_schema": SCHEMA,
        "x_header_rows": 1,
        "x_group_scope": "group numbers count from 1 within each recording",
    }
    info["parameters"] = [_parameter(column, rows) for column in COLUMNS]
    return info


def _parameter(column: Column, rows: Sequence[dict[str, Any]]) -> dict[str, Any]:
    number = column.type in ("double", "integer")
    kind = "string" if column.type == "boolean" else column.type
    parameter: dict[str, Any] = {
        "name": column.name,
        "type": kind,
        "units": column.unit or ("dimensionless" if number else None),
        "fill": MISSING if column.type in ("double", "isotime") else None,
        "description": column.description,
    }
    if not number:
        cells = [cell_text(row[column.name]).encode("utf-8", "backslashreplace") for row in rows]
        parameter["length"] = max(map(len, cells), default=1) or 1
    return parameter


def run_record(
    entries: Sequence[Entry], settings: Settings, *, refused: Sequence[Notice] = ()
) -> dict[str, Any]:
    """Return what the results were made of: software, settings, inputs. It holds no clock time."""
    return {
        "schema": SCHEMA,
        "software": {
            "whistler": __version__,
            "python": platform.python_version(),
            "numpy": metadata.version("numpy"),
            "scipy": metadata.version("scipy"),
        },
        "settings": settings.to_dict(),
        "inputs": [item.provenance for item in entries],
        "refused": [{"path": item.path, "reason": str(item)} for item in refused],
    }


def write_catalogue(
    out: Path,
    entries: Sequence[Entry],
    *,
    settings: Settings,
    refused: Sequence[Notice] = (),
) -> bool:
    """Return whether anything changed after writing the four catalogue files into a folder.

    Parameters
    ----------
    out : Path
        Existing folder.
    entries : sequence of Entry
        Measured recordings, in the order of the rows.
    settings : Settings
        What they were measured with.
    refused : sequence of Notice
        Why other inputs could not be used.

    Raises
    ------
    OutputError
        When a file cannot be written.
    """
    rows = [row for item in entries for row in item.whistlers]
    texts = {
        "catalogue.csv": catalogue_csv(rows),
        "catalogue.csv.meta.json": json_text(sidecar(rows), indent=1) + "\n",
        "catalogue.jsonl": "".join(json_text(row) + "\n" for row in rows),
        "run.json": json_text(run_record(entries, settings, refused=refused), indent=1) + "\n",
    }
    changed = [
        write_whole(out / name, text.encode("utf-8", "backslashreplace"))
        for name, text in texts.items()
    ]
    return any(changed)


def prepare_output(
    out: Path, *, paths: Sequence[str], settings: Settings, overwrite: bool = False
) -> None:
    """Make the output folder ready, or refuse, before anything is analysed.

    Parameters
    ----------
    out : Path
        Folder for the catalogue.
    paths : sequence of str
        Recordings about to be measured.
    settings : Settings
        What with.
    overwrite : bool
        Whether a catalogue of other recordings or settings may be replaced.

    Raises
    ------
    OutputError
        When it cannot be written, or holds a catalogue of something else.
    """
    prepare_folder(out)
    present = [name for name in CATALOGUE_FILES if (out / name).exists()]
    if not present or overwrite or _same_run(out / "run.json", paths, settings):
        return
    reason = f"holds {present[0]} of other recordings or settings"
    notice = Notice("E402", str(out), reason, "choose another folder or give --overwrite")
    raise OutputError(notice)


def _same_run(path: Path, paths: Sequence[str], settings: Settings) -> bool:
    """Whether a run record is of the same settings and of no other recordings."""
    try:
        record = json.loads(path.read_bytes())
        before = [item["path"] for item in [*record["inputs"], *record["refused"]]]
        known = json.loads(json_text(settings.to_dict()))
        return set(before) <= set(paths) and record["settings"] == known
    except (OSError, ValueError, KeyError, TypeError):
        return False


CATALOGUE_FILES = ("catalogue.csv", "catalogue.csv.meta.json", "catalogue.jsonl", "run.json")
