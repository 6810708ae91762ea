"""Hand-picked points of whistlers, read from a table."""

from __future__ import annotations

import csv
import math
from pathlib import Path

import numpy as np

from whistler.errors import Notice, UsageError
from whistler.trace import Trace

COLUMNS = ("frequency_hz", "time_s", "time_sd_s", "trace")
DEFAULT_SD_S = 0.005  # a careful reading off a spectrogram
DEFAULT_NAME = "1"


def read_picks(path: Path) -> dict[str, Trace]:
    """Return the traces in a table of picks, by name in order of appearance.

    Parameters
    ----------
    path : Path
        CSV with one header line ``frequency_hz,time_s[,time_sd_s][,trace]``, columns in any order.
        Without ``time_sd_s`` a point is taken as good to 5 ms; without ``trace`` all points are of
        one trace.

    Returns
    -------
    dict of str to Trace
        Each with frequencies in rising order.

    Raises
    ------
    UsageError
        When the file cannot be read or a line of it is at fault; all faults are named by line.
    """
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        why = error.strerror if isinstance(error, OSError) else "not UTF-8 text"
        raise _refusal(path, f"cannot be read ({why})") from error
    lines = csv.reader(text.splitlines())
    header = [name.strip() for name in next(lines, [])]
    _check_header(path, header)
    points: dict[str, list[tuple[float, float, float]]] = {}
    faults: list[str] = []
    for number, cells in enumerate(lines, start=2):
        if not any(cell.strip() for cell in cells):
            continue
        try:
            name, point = _point(dict(zip(header, cells, strict=True)))
            points.setdefault(name, []).append(point)
        except ValueError as error:
            reason = "not as many cells as columns" if "zip()" in str(error) else str(error)
            faults.append(f"line {number}: {reason}")
    if faults:
        more = f" and {len(faults) - 3} more" if len(faults) > 3 else ""
        raise _refusal(path, ", ".join(faults[:3]) + more)
    if not points:
        raise _refusal(path, "no points")
    return {name: _trace(items) for name, items in points.items()}


def _check_header(path: Path, header: list[str]) -> None:
    missing = [name for name in COLUMNS[:2] if name not in header]
    unknown = [name for name in header if name not in COLUMNS]
    if missing:
        raise _refusal(path, f"line 1: no column {missing[0]!r}")
    if unknown or len(set(header)) < len(header):
        wrong = f"unknown column {unknown[0]!r}" if unknown else "a column appears twice"
        raise _refusal(path, f"line 1: {wrong}")


def _point(cells: dict[str, str]) -> tuple[str, tuple[float, float, float]]:
    """Return trace name and (frequency, time, sigma) of one line."""
    frequency_hz = _value(cells, "frequency_hz", low=1.0, high=1e5)
    time_s = _value(cells, "time_s", low=-1e6, high=1e6)
    time_sd_s = DEFAULT_SD_S
    if cells.get("time_sd_s", "").strip():
        time_sd_s = _value(cells, "time_sd_s", low=1e-6, high=10.0)
    return cells.get("trace", "").strip() or DEFAULT_NAME, (frequency_hz, time_s, time_sd_s)


def _value(cells: dict[str, str], name: str, *, low: float, high: float) -> float:
    try:
        value = float(cells[name])
    except ValueError:
        raise ValueError(f"{name}={cells[name]!r} is not a number") from None
    if not (math.isfinite(value) and low <= value <= high):
        raise ValueError(f"{name}={value:g} is outside {low:g} to {high:g}")
    return value


def _trace(points: list[tuple[float, float, float]]) -> Trace:
    columns = np.array(sorted(points), dtype=np.float64).T
    return Trace(frequency_hz=columns[0], time_s=columns[1], time_sd_s=columns[2])


def _refusal(path: Path, reason: str) -> UsageError:
    notice = Notice("E606", str(path), reason, "correct the table (frequency_hz,time_s,...)")
    return UsageError(notice)
