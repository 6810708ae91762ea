"""Edits as they are written down: on a command line, in a table, in the record of a run."""

from __future__ import annotations

import csv
import io
from pathlib import Path

from whistler.edit import Edit
from whistler.errors import Notice, UsageError
from whistler.picks import number_in, read_table

COLUMNS = ("action", "frequency_hz", "time_s", "time_sd_s", "trace")


def parse_edit(action: str, text: str) -> Edit:
    """Return the edit that an option of the command line asks for.

    Parameters
    ----------
    action : str
        ``drop``, ``move`` or ``add``.
    text : str
        ``FREQ_HZ`` or ``LOW:HIGH`` to drop, ``FREQ_HZ:TIME_S[:SD_S]`` to move or add.

    Raises
    ------
    UsageError
        When it cannot be read.

    Examples
    --------
    >>> print(parse_edit("drop", "4000:5000"))
    drop 4000 to 5000 Hz
    >>> print(parse_edit("add", "3000:11.722:0.002"))
    add 3000 Hz at 11.722 s (± 2 ms)
    """
    parts = [part.strip() for part in text.split(":")]
    most = 2 if action == "drop" else 3
    try:
        if len(parts) > most:
            raise ValueError(f"{text!r} has more than {most} parts")
        cells = {"action": action, "frequency_hz": text}
        if action != "drop":
            cells |= dict(zip(COLUMNS[1:], parts, strict=False))
        return _edit(cells)
    except ValueError as error:
        form = "FREQ_HZ or LOW:HIGH" if action == "drop" else "FREQ_HZ:TIME_S[:SD_S]"
        raise UsageError(Notice("E608", f"--{action}", str(error), f"write {form}")) from error


def read_edits(path: Path) -> list[Edit]:
    """Return the edits in a table, in the order in which they are to be made.

    Parameters
    ----------
    path : Path
        CSV with one header line ``action,frequency_hz,time_s[,time_sd_s][,trace]``, columns in any
        order. Actions are drop, move, add and accept; a drop takes a frequency or ``LOW:HIGH`` and
        no time; accept needs neither.

    Returns
    -------
    list of Edit

    Raises
    ------
    UsageError
        When the file cannot be read or a line of it is at fault; all faults are named by line.
    """

    def refusal(reason: str) -> UsageError:
        step = "correct the table (action,frequency_hz,time_s,...)"
        return UsageError(Notice("E608", str(path), reason, step))

    return read_table(path, _edit, columns=COLUMNS, required=COLUMNS[:2], refusal=refusal)


def edit_line(edit: Edit) -> str:
    """Return an edit as a line of such a table, its sigma stated.

    Parameters
    ----------
    edit : Edit
        The edit.

    Examples
    --------
    >>> edit_line(Edit("move", 5000.0, 11.465, trace=2))
    'move,5000,11.465,0.005,2'
    """
    frequency = "" if edit.frequency_hz is None else f"{edit.frequency_hz:.12g}"
    if edit.frequency_high_hz is not None:
        frequency += f":{edit.frequency_high_hz:.12g}"
    timed = edit.time_s is not None
    time, sd = (f"{edit.time_s:.12g}", f"{edit.sd_s:.12g}") if timed else ("", "")
    line = io.StringIO()
    name = "" if edit.trace is None else str(edit.trace)
    csv.writer(line, lineterminator="").writerow((edit.action, frequency, time, sd, name))
    return line.getvalue()


def _edit(cells: dict[str, str]) -> Edit:
    """Read one line; what is wrong with it comes as a ValueError without more words."""
    low, colon, high = cells["frequency_hz"].partition(":")
    texts = {"frequency_hz": low} | {name: cells.get(name, "") for name in COLUMNS[2:4]}
    values = {name: number_in(text, name) for name, text in texts.items() if text}
    if colon:
        values["frequency_high_hz"] = number_in(high, "frequency_hz")
    try:
        return Edit(cells["action"], trace=cells.get("trace") or None, **values)
    except UsageError as error:
        raise ValueError(error.notice.reason) from error
