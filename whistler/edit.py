"""Edits of a trace by hand: points dropped, moved, added. Nothing is changed in place."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from whistler.errors import Notice, UsageError
from whistler.picks import DEFAULT_SD_S, RANGES
from whistler.trace import Trace

ACTIONS = ("drop", "move", "add", "accept")
TOLERANCE_HZ = 100.0  # points are measured every 400 Hz or more: near enough to read off a figure
NAMED = 3  # nearest frequencies that a message names


@dataclass(frozen=True)
class Edit:
    """One edit of one trace.

    Parameters
    ----------
    action : str
        ``"drop"``, ``"move"``, ``"add"``, or ``"accept"``: keep what is there.
    frequency_hz : float, optional
        Where; only ``"accept"`` can do without, for the whole trace.
    time_s : float, optional
        Where a point is moved to or added, s from the recording's first frame.
    time_sd_s : float, optional
        One-sigma of that time; 5 ms when left out.
    trace : str or int, optional
        Which trace: its name in a table of picks, or its number from 1 within the stroke. Needed
        where there are several.
    frequency_high_hz : float, optional
        Upper end, when a whole range from `frequency_hz` on is dropped.

    Raises
    ------
    UsageError
        When a value is missing, has no meaning for the action, or is outside its range.

    Examples
    --------
    >>> print(Edit("move", 5000.0, 11.465, trace=2))
    move 5000 Hz to 11.465 s (± 5 ms), trace 2
    """

    action: str
    frequency_hz: float | None = None
    time_s: float | None = None
    time_sd_s: float | None = None
    trace: str | int | None = None
    frequency_high_hz: float | None = None

    def __post_init__(self) -> None:
        """Check that the edit can be meant."""
        if fault := _fault(self):
            step = "write drop F, drop LOW:HIGH, move F:TIME or add F:TIME (Hz and s)"
            raise UsageError(Notice("E608", self.action, fault, step))

    @property
    def sd_s(self) -> float:
        """One-sigma of the new time: the given one, or that of a careful reading."""
        return DEFAULT_SD_S if self.time_sd_s is None else self.time_sd_s

    def __str__(self) -> str:
        """Return the edit in words."""
        words = self.action
        if self.frequency_hz is not None:
            words += f" {self.frequency_hz:.6g}"
            high = self.frequency_high_hz
            words += " Hz" if high is None else f" to {high:.6g} Hz"
        if self.time_s is not None:
            to = "to" if self.action == "move" else "at"
            words += f" {to} {self.time_s:.12g} s (± {1e3 * self.sd_s:.6g} ms)"
        return words if self.trace is None else f"{words}, trace {self.trace}"


def _fault(edit: Edit) -> str:
    """Say what is wrong with an edit; nothing when all is right."""
    if edit.action not in ACTIONS:
        return f"unknown action {edit.action!r}, not one of {', '.join(ACTIONS)}"
    if edit.frequency_hz is None and edit.action != "accept":
        return "no frequency_hz"
    timed = edit.action in ("move", "add")
    if timed and edit.time_s is None:
        return "no time_s"
    if not timed and not (edit.time_s is None and edit.time_sd_s is None):
        return f"a time, which {edit.action} does not take"
    for name, value in (
        ("frequency_hz", edit.frequency_hz),
        ("frequency_hz", edit.frequency_high_hz),
        ("time_s", edit.time_s),
        ("time_sd_s", edit.time_sd_s),
    ):
        low, high = RANGES[name]
        if value is not None and not low <= value <= high:
            return f"{name}={value:g} is outside {low:g} to {high:g}"
    if edit.frequency_high_hz is not None and edit.frequency_hz is not None:
        if edit.action != "drop":
            return f"a range of frequencies, which {edit.action} does not take"
        if not edit.frequency_hz < edit.frequency_high_hz:
            return f"a range from {edit.frequency_hz:g} to {edit.frequency_high_hz:g} Hz"
    return ""


def drop_points(
    trace: Trace,
    *,
    frequency_hz: float,
    frequency_high_hz: float | None = None,
    tolerance_hz: float = TOLERANCE_HZ,
) -> Trace:
    """Return a trace without the point nearest to a frequency, or without a range of points.

    Parameters
    ----------
    trace : Trace
        Any number of points.
    frequency_hz : float
        Frequency of the point, or lower end of the range.
    frequency_high_hz : float, optional
        Upper end of the range; both ends belong to it.
    tolerance_hz : float
        How far off the nearest point may be; not for ranges.

    Raises
    ------
    UsageError
        When there is no such point, or two are equally near.

    Examples
    --------
    >>> trace = Trace(np.array([1e3, 2e3, 3e3]), np.array([3.0, 2.5, 2.2]), np.full(3, 0.002))
    >>> drop_points(trace, frequency_hz=1980.0).frequency_hz.tolist()
    [1000.0, 3000.0]
    """
    if frequency_high_hz is None:
        at = _nearest(trace, frequency_hz, tolerance_hz=tolerance_hz, action="drop")
        return trace.only(np.arange(len(trace.frequency_hz)) != at)
    inside = (trace.frequency_hz >= frequency_hz) & (trace.frequency_hz <= frequency_high_hz)
    if not inside.any():
        place = f"drop {frequency_hz:g}:{frequency_high_hz:g}"
        middle_hz = 0.5 * (frequency_hz + frequency_high_hz)
        raise _no_hit(place, f"no point in that range ({_near_words(trace, middle_hz)})")
    return trace.only(~inside)


def move_point(
    trace: Trace,
    *,
    frequency_hz: float,
    time_s: float,
    time_sd_s: float = DEFAULT_SD_S,
    tolerance_hz: float = TOLERANCE_HZ,
) -> Trace:
    """Return a trace with the point nearest to a frequency at another time.

    Parameters
    ----------
    trace : Trace
        Any number of points.
    frequency_hz : float
        Which point; it keeps its own frequency.
    time_s, time_sd_s : float
        Its new time and one-sigma.
    tolerance_hz : float
        How far off the nearest point may be.

    Raises
    ------
    UsageError
        When there is no such point, or two are equally near.
    """
    at = _nearest(trace, frequency_hz, tolerance_hz=tolerance_hz, action="move")
    moved = np.arange(len(trace.frequency_hz)) == at
    return replace(
        trace,
        time_s=np.where(moved, time_s, trace.time_s),
        time_sd_s=np.where(moved, time_sd_s, trace.time_sd_s),
    )


def add_point(
    trace: Trace, *, frequency_hz: float, time_s: float, time_sd_s: float = DEFAULT_SD_S
) -> Trace:
    """Return a trace with one more point, frequencies in rising order.

    Parameters
    ----------
    trace : Trace
        Any number of points.
    frequency_hz, time_s, time_sd_s : float
        The new point.

    Raises
    ------
    UsageError
        When there is a point at that very frequency.
    """
    if np.any(trace.frequency_hz == frequency_hz):
        raise _no_hit(
            f"add {frequency_hz:g}", "a point of that frequency is there already", "move it"
        )
    new = (frequency_hz, time_s, time_sd_s)
    old = (trace.frequency_hz, trace.time_s, trace.time_sd_s)
    columns = [np.append(values, value) for values, value in zip(old, new, strict=True)]
    order = np.argsort(columns[0], kind="stable")
    return Trace(*(column[order] for column in columns))


def apply_edits(traces: Mapping[str, Trace], edits: Sequence[Edit]) -> dict[str, Trace]:
    """Return the traces after all edits, one after the other.

    Parameters
    ----------
    traces : mapping of str to Trace
        By name, or by number from ``"1"`` on.
    edits : sequence of Edit
        In the order in which they are made.

    Raises
    ------
    UsageError
        When an edit names no trace that is there, hits no point, or leaves its trace open where
        there are several.
    """
    edited = dict(traces)
    for edit in edits:
        name = _trace_name(edited, edit)
        edited[name] = _apply(edited[name], edit)
    return edited


def same_points(first: Trace, second: Trace) -> bool:
    """Return whether two traces hold the same points."""
    return all(
        np.array_equal(getattr(first, name), getattr(second, name))
        for name in ("frequency_hz", "time_s", "time_sd_s")
    )


def _apply(trace: Trace, edit: Edit) -> Trace:
    if edit.frequency_hz is None:  # accept the whole trace
        return trace
    if edit.action == "drop":
        high_hz = edit.frequency_high_hz
        return drop_points(trace, frequency_hz=edit.frequency_hz, frequency_high_hz=high_hz)
    if edit.time_s is None:
        _nearest(trace, edit.frequency_hz, tolerance_hz=TOLERANCE_HZ, action="accept")
        return trace
    change = add_point if edit.action == "add" else move_point
    return change(trace, frequency_hz=edit.frequency_hz, time_s=edit.time_s, time_sd_s=edit.sd_s)


def _trace_name(traces: Mapping[str, Trace], edit: Edit) -> str:
    known = f"the traces are {', '.join(traces)}"
    if edit.trace is None:
        if len(traces) == 1:
            return next(iter(traces))
        raise _no_hit(str(edit), f"no trace is named ({known})", "name one with the edit")
    if str(edit.trace) not in traces:
        raise _no_hit(str(edit), f"no such trace ({known})", "name one of them")
    return str(edit.trace)


def _nearest(trace: Trace, frequency_hz: float, *, tolerance_hz: float, action: str) -> int:
    """Index of the one point meant."""
    place = f"{action} {frequency_hz:g}"
    away_hz = np.abs(trace.frequency_hz - frequency_hz)
    if not np.any(away_hz <= tolerance_hz):
        near = _near_words(trace, frequency_hz)
        raise _no_hit(place, f"no point within {tolerance_hz:g} Hz ({near})")
    at = int(np.argmin(away_hz))
    if np.count_nonzero(away_hz == away_hz[at]) > 1:
        step = "drop the range and add what should stay"
        raise _no_hit(place, f"two points as near ({_near_words(trace, frequency_hz)})", step)
    return at


def _near_words(trace: Trace, frequency_hz: float) -> str:
    if not len(trace.frequency_hz):
        return "the trace is empty"
    order = np.argsort(np.abs(trace.frequency_hz - frequency_hz), kind="stable")[:NAMED]
    near = ", ".join(f"{value:.6g}" for value in np.sort(trace.frequency_hz[order]))
    return f"nearest: {near} Hz"


def _no_hit(place: str, reason: str, step: str = "choose one of its points") -> UsageError:
    return UsageError(Notice("E607", place, reason, step))
