"""Rows of results read back from what was saved of them, with the settings they were made with."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from pathlib import Path, PurePath
from typing import Any

import numpy as np

from whistler.clock import parse_time
from whistler.errors import Notice, UsageError
from whistler.picks import RANGES
from whistler.rows import COLUMNS, NAN, WhistlerRow
from whistler.settings import Settings
from whistler.station import station_from_dict
from whistler.trace import Trace

RUN_RECORD = "run.json"
REQUIRED = ("recording", "group", "hops", "trace")
NAMED = 12  # strokes that a message lists
MOST_HOPS = 20
YEARS = (1000, 9000)  # of a clock time
LARGEST = 1e30  # of any number of a row
SIGNED = (-math.inf, math.inf)
LIMITS = {
    "hops": (1, MOST_HOPS),
    "sferic_time_s": RANGES["time_s"],
    "lightning_time_s": RANGES["time_s"],
    "sferic_probability": (0.0, 1.0),
    "hop_probability": (0.0, 1.0),
    "l_value": (1.2, 8.0),
    "equatorial_density_cm3": (1e-6, 1e12),  # more than there is anywhere
    "l_density_correlation": (-1.0, 1.0),
    "density_exponent": (-2.0, 8.0),  # what a model takes
    "fo_f2_mhz": (0.0, 30.0),
    "frequency_low_hz": RANGES["frequency_hz"],
    "frequency_high_hz": RANGES["frequency_hz"],
    "snr_db": SIGNED,
}
"""Lowest and highest value of the numbers of a row; the others are only not below 0."""


@dataclass(frozen=True)
class SavedResults:
    """Rows as they were saved.

    Parameters
    ----------
    path : Path
        The file.
    rows : tuple of WhistlerRow
        In the order of the file; numbers rounded as they are there.
    settings : Settings or None
        What they were made with; None where nothing tells it.
    """

    path: Path
    rows: tuple[WhistlerRow, ...]
    settings: Settings | None


def is_saved_result(path: Path) -> bool:
    """Return whether a file holds JSON, by its first sign."""
    try:
        with Path(path).open("rb") as file:
            return file.read(64).removeprefix(b"\xef\xbb\xbf").lstrip()[:1] == b"{"
    except OSError:
        return False


def read_results(path: Path) -> SavedResults:
    """Return the rows in a ``catalogue.jsonl`` or in the document that ``--json`` prints.

    Parameters
    ----------
    path : Path
        Told apart by content. The settings of a catalogue are those of the ``run.json`` next to it.

    Returns
    -------
    SavedResults

    Raises
    ------
    UsageError
        When the file cannot be read, or holds something else; faults are named by row.
    """
    text = _text(path)
    try:
        tree = json.loads(text, parse_constant=_refuse_constant)
    except ValueError:
        tree = None  # not one document: a line for each row
    if isinstance(tree, dict) and "group" not in tree:
        if not isinstance(tree.get("whistlers"), list):
            raise _refusal(path, "JSON without a list of whistlers")
        settings = _settings_in(tree, path)
        return SavedResults(path, _rows(path, tree["whistlers"]), settings)
    lines = [line for line in text.splitlines() if line.strip()]
    rows = _rows(path, lines, parse=lambda line: json.loads(line, parse_constant=_refuse_constant))
    return SavedResults(path, rows, _run_settings(path.parent / RUN_RECORD))


def row_from_json(values: dict[str, Any]) -> WhistlerRow:
    """Return the row that its plain values describe: back from ``row_values``.

    Parameters
    ----------
    values : dict
        Keys as in the catalogue's columns, and ``trace``; null is undetermined. Numbers that are
        left out are undetermined too, and unknown keys, of a later version, are passed over.

    Raises
    ------
    ValueError
        When a key is missing, or a value is of the wrong kind or outside its range.

    Examples
    --------
    >>> trace = {"frequency_hz": [1e3], "time_s": [2.5], "time_sd_s": [0.002]}
    >>> row = row_from_json({"recording": "a.wav", "group": 1, "hops": 3, "trace": trace})
    >>> row.hops, row.l_value
    (3, nan)
    """
    if not isinstance(values, dict):
        raise ValueError("not a row of results")
    if missing := [name for name in REQUIRED if name not in values]:
        raise ValueError(f"no {missing[0]!r}")
    known = {
        column.name: _KINDS[column.type](column.name, values[column.name])
        for column in COLUMNS
        if column.name in values and column.name != "flags"
    }
    flags = values.get("flags", [])
    if not (isinstance(flags, list) and all(isinstance(word, str) for word in flags)):
        raise ValueError(f"flags={flags!r} is not a list of words")
    row = WhistlerRow(**known, flags=tuple(flags), trace=_trace(values["trace"]))
    _check_sferic(row)
    return row


def settings_from_dict(values: dict[str, Any], *, path: Path) -> Settings:
    """Return the settings that their plain values describe: back from ``Settings.to_dict``.

    Parameters
    ----------
    values : dict
        Keys as the fields of :class:`whistler.settings.Settings`; what is left out has its default.
    path : Path
        Where they come from, for messages.

    Raises
    ------
    UsageError
        When there is an unknown key or a value outside its range.

    Examples
    --------
    >>> settings_from_dict(Settings(max_hops=3).to_dict(), path=Path("run.json")).max_hops
    3
    """
    tables = (values, *(values.get(name, {}) for name in ("station", "options")))
    if not all(isinstance(part, dict) for part in tables):
        raise _refusal(path, "settings that are not an object")
    unknown = sorted(set(values) - {field.name for field in fields(Settings)})
    if unknown:
        raise _refusal(path, f"unknown setting {unknown[0]!r}")
    edits = values.get("options", {}).get("edits", [])
    if not (isinstance(edits, list | tuple) and all(isinstance(line, str) for line in edits)):
        raise _refusal(path, "edits that are not a list of lines")
    known = {name: _frozen(value) for name, value in values.items()}
    if "station" in values:
        known["station"] = station_from_dict(values["station"], path=path)
    if "options" in values:
        known["options"] = tuple((k, _frozen(v)) for k, v in values["options"].items())
    try:
        return Settings(**known)
    except (TypeError, AttributeError) as error:
        raise _refusal(path, f"a setting is of the wrong kind ({error})") from error


def select_stroke(
    results: SavedResults, *, group: int | None = None, recording: str | None = None
) -> list[WhistlerRow]:
    """Return the rows of one stroke.

    Parameters
    ----------
    results : SavedResults
        What was read.
    group : int, optional
        Number of the stroke; can be left out when there is only one.
    recording : str, optional
        Its recording, by path or file name; needed when several have such a stroke.

    Raises
    ------
    UsageError
        When there is none such, or more than one.
    """
    strokes: dict[tuple[str, int], list[WhistlerRow]] = {}
    for row in results.rows:
        if group in (None, row.group) and _is_named(row.recording, recording):
            strokes.setdefault((row.recording, row.group), []).append(row)
    if len(strokes) == 1:
        return next(iter(strokes.values()))
    if not strokes:
        raise _refusal(results.path, *_none_such(results.rows, group, recording))
    names = list(dict.fromkeys(name for name, _ in strokes))
    if len(names) > 1:
        reason = f"{len(names)} recordings have such a stroke ({_listed(names)})"
        raise _refusal(results.path, reason, "name one with --recording")
    numbers = sorted(number for _, number in strokes)
    reason = f"{len(numbers)} strokes ({_listed(numbers)})"
    raise _refusal(results.path, reason, "choose one with --group")


def _none_such(
    rows: Sequence[WhistlerRow], group: int | None, recording: str | None
) -> tuple[str, str]:
    here = [row for row in rows if _is_named(row.recording, recording)]
    if not rows:
        return "no whistlers", "measure another recording"
    if not here:
        known = _listed(list(dict.fromkeys(row.recording for row in rows)))
        return f"no recording {recording!r}", f"choose one of {known}"
    known = _listed(sorted({row.group for row in here}))
    return f"no stroke {group}", f"choose one of {known}"


def _is_named(path: str, wanted: str | None) -> bool:
    return wanted is None or wanted in (path, PurePath(path).name)


def _listed(items: Sequence[object]) -> str:
    more = f" and {len(items) - NAMED} more" if len(items) > NAMED else ""
    return ", ".join(map(str, items[:NAMED])) + more


def _text(path: Path) -> str:
    try:
        return Path(path).read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        why = error.strerror if isinstance(error, OSError) else "not UTF-8 text"
        raise _refusal(path, f"cannot be read ({why})") from error


def _rows(
    path: Path, items: Sequence[Any], parse: Callable[[Any], Any] = lambda item: item
) -> tuple[WhistlerRow, ...]:
    rows, faults = [], []
    for number, item in enumerate(items, start=1):
        try:
            rows.append(row_from_json(parse(item)))
        except ValueError as error:
            faults.append(f"row {number}: {error}")
    if faults:
        more = f" and {len(faults) - 1} more" if len(faults) > 1 else ""
        raise _refusal(path, faults[0] + more)
    return tuple(rows)


def _run_settings(path: Path) -> Settings | None:
    if not path.exists():
        return None
    try:
        tree = json.loads(_text(path))
    except ValueError as error:
        raise _refusal(path, "not the record of a run") from error
    return _settings_in(tree, path)


def _settings_in(tree: Any, path: Path) -> Settings:
    values = tree.get("settings") if isinstance(tree, dict) else None
    if not isinstance(values, dict):
        raise _refusal(path, "no settings in it")
    return settings_from_dict(values, path=path)


def _refuse_constant(name: str) -> None:
    raise ValueError(f"{name}, which is not JSON")


def _frozen(value: Any) -> Any:
    return tuple(map(_frozen, value)) if isinstance(value, list) else value


def _number(name: str, value: Any) -> float:
    if value is None:
        return NAN
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"{name}={value!r} is not a number")
    return float(_within(name, value, LIMITS.get(name, (0.0, math.inf))))


def _whole(name: str, value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, int):
        raise ValueError(f"{name}={value!r} is not a whole number")
    return int(_within(name, value, LIMITS.get(name, SIGNED)))


def _within(name: str, value: float, limits: tuple[float, float]) -> float:
    low, high = limits
    if abs(value) > LARGEST:
        raise ValueError(f"{name} is a number beyond {LARGEST:g}")
    if not low <= value <= high:
        raise ValueError(f"{name}={value:.6g} is outside {low:g} to {high:g}")
    return value


def _word(name: str, value: Any) -> str:
    if not isinstance(value, str):
        raise ValueError(f"{name}={value!r} is not text")
    return value


def _clock_or_none(name: str, value: Any) -> str | None:
    if value is None:
        return None
    try:
        year = parse_time(_word(name, value)).year
    except (UsageError, OverflowError):
        raise ValueError(f"{name}={value!r} is not a time") from None
    if not YEARS[0] <= year <= YEARS[1]:
        raise ValueError(f"{name}={value!r} is outside the years {YEARS[0]} to {YEARS[1]}")
    return str(value)


def _truth(name: str, value: Any) -> bool:
    if not isinstance(value, bool):
        raise ValueError(f"{name}={value!r} is neither true nor false")
    return value


_KINDS: dict[str, Callable[[str, Any], Any]] = {
    "double": _number,
    "integer": _whole,
    "string": _word,
    "isotime": _clock_or_none,
    "boolean": _truth,
}


def _trace(values: Any) -> Trace:
    names = ("frequency_hz", "time_s", "time_sd_s")
    if not (isinstance(values, dict) and set(names) <= set(values)):
        raise ValueError("trace without frequency_hz, time_s and time_sd_s")
    if not all(isinstance(values[name], list) for name in names):
        raise ValueError("trace with something other than lists")
    columns = [
        np.array([_point(name, value) for value in values[name]], np.float64) for name in names
    ]
    if len({len(column) for column in columns}) > 1:
        raise ValueError("trace with columns of different lengths")
    return Trace(*columns)


def _point(name: str, value: Any) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise ValueError(f"trace holds something other than numbers ({name}={value!r})")
    return float(_within(name, value, RANGES[name]))


def _check_sferic(row: WhistlerRow) -> None:
    """Refuse an identified sferic that no fit could lean on."""
    if not row.sferic_seen:
        return
    low, high = RANGES["time_sd_s"]
    if not (math.isfinite(row.sferic_time_s) and low <= row.sferic_time_sd_s <= high):
        raise ValueError(f"sferic_seen without its time and one-sigma ({low:g} to {high:g} s)")


def _refusal(path: Path, reason: str, step: str = "name a catalogue.jsonl") -> UsageError:
    return UsageError(Notice("E609", str(path), reason, step))
