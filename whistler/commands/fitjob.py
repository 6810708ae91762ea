"""What ``whistler fit`` has to do: picks or saved rows, edits, ties and settings put together."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from whistler.clock import parse_time
from whistler.commands import common
from whistler.edit import Edit
from whistler.editfile import edit_line, parse_edit, read_edits
from whistler.errors import Notice, OutputError, UsageError
from whistler.handfit import hop_orders
from whistler.pickfit import check_ties, fit_picks, refit, time_zero
from whistler.picks import read_picks
from whistler.saved import SavedResults, is_saved_result, read_results, select_stroke
from whistler.settings import Settings
from whistler.station import load_station

if TYPE_CHECKING:
    from whistler.catalogue import Entry
    from whistler.rows import WhistlerRow

TIES = ("sferic_time_s", "sferic_time_sd_s", "lightning_time_s", "l_value")


@dataclass(frozen=True)
class Told:
    """What the command line says.

    Parameters
    ----------
    ties : dict
        Keys of :data:`TIES`.
    hops : tuple of int or None
        Field-line crossings of all traces, or of each.
    edits : tuple of Edit
        In the order in which they are made.
    date : str or None
        UTC of time zero of picks.
    station : Path or None
        Station file.
    declared : dict
        Fields of :class:`Settings` that were given.
    group, recording : int or None, str or None
        Which stroke of a saved result.
    free_time : bool
        Whether to leave out its sferic.
    """

    ties: dict[str, Any]
    hops: tuple[int, ...] | None
    edits: tuple[Edit, ...]
    date: str | None
    station: Path | None
    declared: dict[str, Any]
    group: int | None
    recording: str | None
    free_time: bool


@dataclass(frozen=True)
class Job:
    """A fit that is ready to run.

    Parameters
    ----------
    path : str
        The input.
    recording : str
        What its rows are named after.
    settings : Settings
        With all that the fit was told.
    zero : datetime or None
        From where times count.
    run : callable
        Does it.
    """

    path: str
    recording: str
    settings: Settings
    zero: datetime | None
    run: Callable[[], list[WhistlerRow]]

    def keep_input(self, out: Path) -> None:
        """Refuse to write over the result that is edited.

        Raises
        ------
        OutputError
            When the folder holds it.
        """
        from whistler.catalogue import CATALOGUE_FILES

        files = [out / name for name in CATALOGUE_FILES]
        if any(file.exists() and file.samefile(self.path) for file in files):
            reason = f"holds {self.path}, which is left as it is"
            raise OutputError(Notice("E402", str(out), reason, "choose another folder"))

    def entry(self, rows: Sequence[WhistlerRow]) -> Entry:
        """Return the rows as plain values, their recording told from the input."""
        from whistler.catalogue import picks_entry

        entry = picks_entry(self.path, rows, start_time=self.zero)
        return replace(entry, recording={**entry.recording, "path": self.recording})


def collect_edits(
    table: Path | None, options: dict[str, list[str] | None], *, trace: str | None
) -> tuple[Edit, ...]:
    """Return all edits of a command line: those of the table, then drops, moves and additions.

    Parameters
    ----------
    table : Path or None
        Table of edits.
    options : dict
        Texts of the options by action.
    trace : str or None
        Trace of the edits that name none.

    Raises
    ------
    UsageError
        When one cannot be read, or a trace is named for none.
    """
    edits = read_edits(table) if table is not None else []
    edits += [parse_edit(action, text) for action, texts in options.items() for text in texts or ()]
    if trace is not None and not edits:
        reason = "names the trace of edits, and there are none"
        raise UsageError(Notice("E605", "--trace", reason, "add --drop, --move, --add or --edits"))
    return tuple(edit if edit.trace is not None else replace(edit, trace=trace) for edit in edits)


def read_job(path: Path, told: Told, *, tell: common.Reporter) -> Job:
    """Return the fit that the input and the command line ask for.

    Parameters
    ----------
    path : Path
        Table of picks or saved result, told apart by content.
    told : Told
        The command line.
    tell : Reporter
        Takes notices.

    Raises
    ------
    UsageError
        When something cannot be read, or does not go together.
    """
    if told.free_time and told.ties["sferic_time_s"] is not None:
        reason = "no sferic asked for, and one given with --sferic-time"
        raise UsageError(Notice("E605", "--free-time", reason, "leave one of them out"))
    check_ties(**told.ties)
    if is_saved_result(path):
        return _saved_job(read_results(path), told, tell)
    return _picks_job(path, told)


def _picks_job(path: Path, told: Told) -> Job:
    saved_only = {"--group": told.group, "--recording": told.recording}
    saved_only["--free-time"] = told.free_time or None
    for option, value in saved_only.items():
        if value is not None:
            reason = f"has no meaning for {path.name}, which is a table of picks"
            raise UsageError(Notice("E605", option, reason, "leave it out"))
    zero = parse_time(told.date) if told.date else None
    traces = read_picks(path)
    hops = hop_orders(told.hops or (1,), len(traces))
    options = {"date": told.date, "hops": _brief(hops), **told.ties, **_edits_option(told.edits)}
    settings = common.build_settings(
        station=told.station, options=tuple(options.items()), **told.declared
    )
    run = partial(
        fit_picks,
        traces,
        told.edits,
        settings=settings,
        recording=str(path),
        hops=hops,
        start_time=zero,
        **told.ties,
    )
    return Job(str(path), str(path), settings, zero, run)


def _saved_job(results: SavedResults, told: Told, tell: common.Reporter) -> Job:
    if told.date is not None:
        reason = "times in a result count from its recording"
        raise UsageError(Notice("E605", "--date", reason, "give measure --start"))
    rows = select_stroke(results, group=told.group, recording=told.recording)
    if results.settings is None:
        reason = "no run.json next to it"
        tell(Notice("N502", str(results.path), reason, "fitted with default settings"))
    base = results.settings or Settings()
    changes = dict(told.declared)
    if told.station is not None:
        changes["station"] = load_station(told.station)
    before = dict(base.options)
    # A lightning time or an L that was given to an earlier fit holds on.
    ties = {name: told.ties[name] for name in TIES}
    for name in ("lightning_time_s", "l_value"):
        if ties[name] is None:
            ties[name] = before.get(name)
    options = {**before, "group": rows[0].group, **_tie_options(rows, ties, told)}
    options |= _edits_option(told.edits, before.get("edits", ()))
    settings = replace(base, options=tuple(options.items()), **changes)
    hops, free = told.hops, told.free_time
    run = partial(refit, rows, told.edits, settings=settings, hops=hops, free_time=free, **ties)
    return Job(str(results.path), rows[0].recording, settings, time_zero(rows), run)


def _tie_options(rows: Sequence[WhistlerRow], ties: dict[str, Any], told: Told) -> dict[str, Any]:
    """State the ties and hops that the fit really has, stored ones too."""
    orders = [row.hops for row in rows]
    if told.hops is not None:
        orders = list(hop_orders(told.hops, len(rows)))
    stated = dict(ties)
    if ties["sferic_time_s"] is None and rows[0].sferic_seen and not told.free_time:
        stated["sferic_time_s"] = rows[0].sferic_time_s
        stated["sferic_time_sd_s"] = rows[0].sferic_time_sd_s
    return {"hops": _brief(orders), **stated}


def _brief(orders: Sequence[int]) -> int | tuple[int, ...]:
    return orders[0] if len(set(orders)) == 1 else tuple(orders)


def _edits_option(edits: Sequence[Edit], before: Sequence[str] = ()) -> dict[str, Any]:
    """State the edits as lines of a table of edits, earlier ones first; nothing when none."""
    lines = (*before, *map(edit_line, edits))
    return {"edits": lines} if lines else {}
