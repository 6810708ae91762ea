"""Rows of results read back from what was saved of them, with the settings they were made with."""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields
from pathlib import Path, PurePath
from typing import Any

import numpy as np

from whistler.errors import Notice, UsageError
from whistler.rows import COLUMNS, NAN, WhistlerRow
from whistler.settings import Settings
from whistler.station import station_from_dict
from whistler.trace import Trace

RUN_RECORD = "run.json"
REQUIRED = ("recording", "group", "hops", "trace")
NAMED = 12  # strokes that a message lists


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
        When a key is missing, or a value is of the wrong kind.

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
    return WhistlerRow(**known, flags=tuple(flags), trace=_trace(values["trace"]))


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
    return float(value)


def _whole(name: str, value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, int):
        raise ValueError(f"{name}={value!r} is not a whole number")
    return value


def _text_or_none(name: str, value: Any) -> str | None:
    if value is not None and not isinstance(value, str):
        raise ValueError(f"{name}={value!r} is not text")
    return value


def _truth(name: str, value: Any) -> bool:
    if not isinstance(value, bool):
        raise ValueError(f"{name}={value!r} is neither true nor false")
    return value


_KINDS: dict[str, Callable[[str, Any], Any]] = {
    "double": _number,
    "integer": _whole,
    "string": _text_or_none,
    "isotime": _text_or_none,
    "boolean": _truth,
}


def _trace(values: Any) -> Trace:
    names = ("frequency_hz", "time_s", "time_sd_s")
    if not (isinstance(values, dict) and set(names) <= set(values)):
        raise ValueError("trace without frequency_hz, time_s and time_sd_s")
    try:
        columns = [np.array(values[name], dtype=np.float64) for name in names]
    except (TypeError, ValueError):
        raise ValueError("trace holds something other than numbers") from None
    if not all(column.shape == (len(columns[0]),) for column in columns):
        raise ValueError("trace with columns of different lengths")
    return Trace(*columns)


def _refusal(path: Path, reason: str, step: str = "name a catalogue.jsonl") -> UsageError:
    return UsageError(Notice("E609", str(path), reason, step))
