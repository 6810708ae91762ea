"""Hand-picked points of whistlers, read from a table."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TypeVar

import numpy as np

from whistler.errors import Notice, UsageError
from whistler.trace import Trace

COLUMNS = ("frequency_hz", "time_s", "time_sd_s", "trace")
DEFAULT_SD_S = 0.005  # a careful reading off a spectrogram
DEFAULT_NAME = "1"
RANGES = {"frequency_hz": (1.0, 1e5), "time_s": (-1e6, 1e6), "time_sd_s": (1e-6, 10.0)}
"""Lowest and highest value of each number of a point."""

Line = TypeVar("Line")


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

    def refusal(reason: str) -> UsageError:
        step = "correct the table (frequency_hz,time_s,...)"
        return UsageError(Notice("E606", str(path), reason, step))

    lines = read_table(path, _point, columns=COLUMNS, required=COLUMNS[:2], refusal=refusal)
    if not lines:
        raise refusal("no points")
    points: dict[str, list[tuple[float, float, float]]] = {}
    for name, point in lines:
        points.setdefault(name, []).append(point)
    return {name: _trace(items) for name, items in points.items()}


def read_table(
    path: Path,
    read_line: Callable[[dict[str, str]], Line],
    *,
    columns: Sequence[str],
    required: Sequence[str],
    refusal: Callable[[str], UsageError],
) -> list[Line]:
    """Return what each line of a CSV file says, blank lines left out.

    Parameters
    ----------
    path : Path
        UTF-8 text with one header line; columns in any order.
    read_line : callable
        Takes the stripped cells of a line by column; raises ValueError when one is at fault.
    columns, required : sequence of str
        Columns that may, and that must be there.
    refusal : callable
        Takes a reason, returns the error to raise.
    """
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        why = error.strerror if isinstance(error, OSError) else "not UTF-8 text"
        raise refusal(f"cannot be read ({why})") from error
    lines = csv.reader(text.splitlines())
    header = [name.strip() for name in next(lines, [])]
    if wrong := _header_fault(header, columns, required):
        raise refusal(f"line 1: {wrong}")
    items: list[Line] = []
    faults: list[str] = []
    for number, cells in enumerate(lines, start=2):
        if not any(cell.strip() for cell in cells):
            continue
        try:
            if len(cells) != len(header):
                raise ValueError("not as many cells as columns")
            stripped = [cell.strip() for cell in cells]
            items.append(read_line(dict(zip(header, stripped, strict=True))))
        except ValueError as error:
            faults.append(f"line {number}: {error}")
    if faults:
        more = f" and {len(faults) - 3} more" if len(faults) > 3 else ""
        raise refusal(", ".join(faults[:3]) + more)
    return items


def number_in(text: str, name: str) -> float:
    """Return the number that a text states, within the range of its column.

    Parameters
    ----------
    text : str
        As written.
    name : str
        A key of :data:`RANGES`.

    Raises
    ------
    ValueError
        When it is not a number, or outside.

    Examples
    --------
    >>> number_in("4e3", "frequency_hz")
    4000.0
    """
    try:
        value = float(text)
    except ValueError:
        raise ValueError(f"{name}={text!r} is not a number") from None
    low, high = RANGES[name]
    if not (math.isfinite(value) and low <= value <= high):
        raise ValueError(f"{name}={value:g} is outside {low:g} to {high:g}")
    return value


def _header_fault(header: list[str], columns: Sequence[str], required: Sequence[str]) -> str:
    missing = [name for name in required if name not in header]
    unknown = [name for name in header if name not in columns]
    if missing:
        return f"no column {missing[0]!r}"
    if unknown:
        return f"unknown column {unknown[0]!r}"
    return "a column appears twice" if len(set(header)) < len(header) else ""


def _point(cells: dict[str, str]) -> tuple[str, tuple[float, float, float]]:
    """Return trace name and (frequency, time, sigma) of one line."""
    frequency_hz = number_in(cells["frequency_hz"], "frequency_hz")
    time_s = number_in(cells["time_s"], "time_s")
    time_sd_s = DEFAULT_SD_S
    if cells.get("time_sd_s"):
        time_sd_s = number_in(cells["time_sd_s"], "time_sd_s")
    return cells.get("trace") or DEFAULT_NAME, (frequency_hz, time_s, time_sd_s)


def _trace(points: list[tuple[float, float, float]]) -> Trace:
    columns = np.array(sorted(points), dtype=np.float64).T
    return Trace(frequency_hz=columns[0], time_s=columns[1], time_sd_s=columns[2])
