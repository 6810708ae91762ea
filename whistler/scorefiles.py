"""The files of a completeness run: document, table of whistlers, figure."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from whistler.catalogue import cell_text, json_text
from whistler.clock import iso_time
from whistler.completeness import Completeness, Request
from whistler.errors import Notice, OutputError, UsageError
from whistler.recovery import Injection
from whistler.rows import TIME_DECIMALS, plain
from whistler.savefile import prepare_folder, write_whole
from whistler.scores import run_key, share_curves
from whistler.settings import Settings

FILES = ("completeness.json", "completeness.csv", "completeness.png")
_TRUE = (
    "hops",
    "l_value",
    "equatorial_density_cm3",
    "snr_db",
    "frequency_low_hz",
    "frequency_high_hz",
    "spread_s",
)
_MEASURED = (
    "sferic_seen",
    "hops",
    "l_value",
    "l_value_sd",
    "l_value_low",
    "l_value_high",
    "equatorial_density_cm3",
    "equatorial_density_sd_cm3",
    "snr_db",
    "significance",
    "uncertainty_status",
    "flags",
)
CSV_COLUMNS = (
    "recording",
    "time",
    "lightning_time_s",
    "sferic_time_s",
    "sferic_heard",
    "kind",
    *_TRUE,
    "found",
    "time_error_s",
    "found_sferic_time_s",
    *(f"found_{name}" for name in _MEASURED),
)


def prepare_completeness(
    out: Path, *, folder: Path, settings: Settings, request: Request, overwrite: bool
) -> None:
    """Make the output folder ready, or refuse, before anything is analysed.

    Parameters
    ----------
    out : Path
        Folder for the results.
    folder : Path
        Folder of the recordings.
    settings : Settings
        Of the search.
    request : Request
        What to inject.
    overwrite : bool
        Whether results of something else may be replaced.

    Raises
    ------
    UsageError
        When `out` is the folder of the recordings or lies within it.
    OutputError
        When it cannot be written, or holds results of something else.
    """
    if out.resolve().is_relative_to(folder.resolve()):
        reason = f"lies in the folder of the recordings, {folder}, into which nothing is written"
        raise UsageError(Notice("E605", str(out), reason, "name a folder outside it"))
    prepare_folder(out)
    present = [name for name in FILES if (out / name).exists()]
    if present and not overwrite and not _same_run(out / FILES[0], folder, settings, request):
        reason = f"holds {present[0]} of other recordings or settings"
        notice = Notice("E402", str(out), reason, "choose another folder or give --overwrite")
        raise OutputError(notice)


def write_completeness(out: Path, result: Completeness, *, document: dict[str, Any]) -> None:
    """Write document, table of whistlers and figure into a folder, each whole or not at all.

    Parameters
    ----------
    out : Path
        Existing folder.
    result : Completeness
        The run.
    document : dict
        Its document.

    Raises
    ------
    OutputError
        When a file cannot be written.
    """
    from whistler.figures.shares import plot_shares, shares_png

    texts = {
        FILES[0]: json_text(document, indent=1) + "\n",
        FILES[1]: injections_csv(result.injections),
    }
    for name, text in texts.items():
        write_whole(out / name, text.encode("utf-8", "backslashreplace"))
    figure = plot_shares(
        share_curves(result), title=f"Share of injected whistlers found in {document['folder']}"
    )
    write_whole(out / FILES[2], shares_png(figure))


def injections_csv(injections: Sequence[Injection]) -> str:
    """Return one line for each injected whistler, truth and what was found, as CSV (RFC 4180)."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    lines = [_csv_values(item) for item in injections]
    writer.writerow(CSV_COLUMNS)
    for line in lines:
        writer.writerow([cell_text(line[name]) for name in CSV_COLUMNS])
    return out.getvalue()


def _same_run(path: Path, folder: Path, settings: Settings, request: Request) -> bool:
    try:
        document = json.loads(path.read_bytes())
        wanted = {"settings": settings.to_dict(), **run_key(str(folder), request)}
        known = json.loads(json_text(wanted))
        return all(document[name] == value for name, value in known.items())
    except (OSError, ValueError, KeyError, TypeError):
        return False


def _csv_values(item: Injection) -> dict[str, Any]:
    """Values of one whistler; times from the recording's first sample."""
    truth, row = item.truth, item.row

    def moment(time_s: float) -> Any:
        return plain(item.start_s + time_s, decimals=TIME_DECIMALS)

    return {
        "recording": item.recording,
        "time": iso_time(item.time),
        "lightning_time_s": moment(truth.lightning_time_s),
        "sferic_time_s": moment(truth.sferic_time_s),
        "sferic_heard": truth.sferic_seen,
        "kind": "diffuse" if item.diffuse else "thin",
        **{name: plain(getattr(truth, name)) for name in _TRUE},
        "found": item.found,
        "time_error_s": plain(item.time_error_s, decimals=TIME_DECIMALS),
        "found_sferic_time_s": None if row is None else moment(row.sferic_time_s),
        **{
            f"found_{name}": None if row is None else plain(getattr(row, name))
            for name in _MEASURED
        },
    }
