"""What the commands share: options, notices on standard error, settings, exit codes."""

from __future__ import annotations

import io
import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from whistler.errors import Notice, UsageError
from whistler.settings import Settings
from whistler.station import Station, load_station

if TYPE_CHECKING:
    from whistler.catalogue import Entry

OK, PARTLY, UNUSABLE, INTERNAL = 0, 3, 4, 70
MOST_HOPS = 20
INTERNAL_CODE = "E701"

StationOption = Annotated[
    Path | None,
    typer.Option(
        "--station", metavar="FILE.toml", help="Station file; its keys are in the README."
    ),
]
StartOption = Annotated[
    str | None,
    typer.Option("--start", metavar="ISO8601", help="Time of the first sample, UTC."),
]
OutOption = Annotated[
    Path | None, typer.Option("--out", metavar="DIR", help="Folder for catalogue and figures.")
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print one JSON document, no table.")]
QuietOption = Annotated[bool, typer.Option("--quiet", "-q", help="Only errors on stderr.")]
VerboseOption = Annotated[
    bool, typer.Option("--verbose", "-v", help="Show the traceback of an error.")
]
ChannelOption = Annotated[
    str, typer.Option("--channel", metavar="N|NAME|mean", help="Number from 1, name, or the mean.")
]
FalseAlarmsOption = Annotated[
    float, typer.Option("--false-alarms", metavar="RATE", help="False alarms allowed per hour.")
]
MaxHopsOption = Annotated[
    int, typer.Option("--max-hops", metavar="N", help="Most field-line crossings tried.")
]
DensityPriorOption = Annotated[
    str,
    typer.Option(
        "--density-prior", metavar="NAME", help="What tells hop orders apart: saturated or none."
    ),
]
DensityFactorOption = Annotated[
    float,
    typer.Option("--density-factor", metavar="X", help="Multiply the prior's densities by this."),
]
FitPriorOption = Annotated[
    str,
    typer.Option(
        "--fit-prior", metavar="NAME", help="Density prior in every fit: none or climatology."
    ),
]
FitPriorSdOption = Annotated[
    float, typer.Option("--fit-prior-sd", metavar="DEX", help="Its one-sigma, decades of density.")
]
AlphaOption = Annotated[
    float, typer.Option("--alpha", metavar="A", help="Density along the line: r^-A.")
]
AlphaSdOption = Annotated[
    float,
    typer.Option("--alpha-sd", metavar="SD", help="One-sigma of alpha, in (±)."),
]
OverwriteOption = Annotated[
    bool, typer.Option("--overwrite", help="Replace a catalogue of something else.")
]


class Reporter:
    """Writes notices to standard error, one line each.

    Parameters
    ----------
    quiet : bool
        Leave out warnings and notes.
    """

    def __init__(self, *, quiet: bool) -> None:
        self.quiet = quiet

    def __call__(self, notice: Notice) -> None:
        """Show a notice."""
        if notice.severity == "error" or not self.quiet:
            show(notice)


def show(notice: Notice) -> None:
    """Write one notice to standard error."""
    print(notice, file=sys.stderr, flush=True)


def speak_any_alphabet() -> None:
    """Let a terminal show what its encoding lacks as escapes rather than fail on it."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")


def mute_output() -> None:
    """Send standard output nowhere from now on, so that closing it at exit cannot fail either."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def build_settings(*, station: Path | None, channel: str = "1", **values: Any) -> Settings:
    """Return the settings that the options of a command ask for.

    Parameters
    ----------
    station : Path or None
        Station file.
    channel : str
        Number from 1, name in the station file, or ``mean``.
    **values
        Further fields of :class:`Settings`.

    Raises
    ------
    UsageError
        When a value lies outside its range.
    """
    described = load_station(station) if station is not None else Station()
    chosen: int | str = channel
    if channel in described.channel_names:
        chosen = described.channel_names.index(channel) + 1
    elif channel.isdecimal():
        chosen = int(channel)
    return Settings(station=described, channel=chosen, **values)


def exit_code(entries: Sequence[Entry], refused: Sequence[Notice]) -> int:
    """Return the exit code for measured and refused recordings.

    Parameters
    ----------
    entries : sequence of Entry
        What was measured.
    refused : sequence of Notice
        Why the others were not.
    """
    if any(notice.code == INTERNAL_CODE for notice in refused):
        return INTERNAL
    if refused and not entries:
        return UNUSABLE
    partial = any(not item.provenance["complete"] for item in entries)
    return PARTLY if refused or partial else OK


def require_hops(hops: int) -> None:
    """Refuse a number of field-line crossings outside 1 to 20.

    Raises
    ------
    UsageError
        When it is outside.
    """
    if not 1 <= hops <= MOST_HOPS:
        reason = f"{hops} is outside 1 to {MOST_HOPS}"
        raise UsageError(Notice("E601", "--hops", reason, "choose a number in that range"))


@contextmanager
def progress_bar(*, quiet: bool) -> Iterator[Callable[[float, float], None]]:
    """Yield what takes (done, total); a bar on standard error only where a person watches."""
    if quiet or not sys.stderr.isatty():
        yield lambda done, total: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskProgressColumn, TimeRemainingColumn

    columns = (BarColumn(), TaskProgressColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("recordings", total=None)
        yield lambda done, total: bar.update(task, completed=done, total=total)
