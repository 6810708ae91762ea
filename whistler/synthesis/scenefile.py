"""Scenes as TOML files: keys are field names, tables are parts, arrays of tables are lists."""

from __future__ import annotations

import difflib
import tomllib
import typing
from dataclasses import MISSING, fields
from pathlib import Path as FilePath
from types import NoneType
from typing import Any, cast

from whistler.errors import Notice, UsageError
from whistler.synthesis.scene import Scene

#: Scene files end in this; the rest of the name is the recording's.
SUFFIX = ".scene.toml"


def load_scene(path: FilePath) -> Scene:
    """Return the scene a TOML file describes, named after the file.

    Parameters
    ----------
    path : pathlib.Path
        File; ``NAME.scene.toml`` (or ``NAME.toml``) makes recordings called NAME.

    Returns
    -------
    Scene
        The scene.

    Raises
    ------
    UsageError
        When the file cannot be read or holds an unknown key or an impossible value; a key is named
        with the nearest known one.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = f"cannot be read ({getattr(error, 'strerror', None) or error})"
        raise UsageError(Notice("E611", str(path), reason, "give a scene file")) from error
    name = path.name.removesuffix(".toml").removesuffix(".scene")
    try:
        return scene_from_toml(text, name=name)
    except UsageError as error:
        notice = Notice("E611", str(path), error.notice.reason, error.notice.consequence)
        raise UsageError(notice) from error


def scene_from_toml(text: str, *, name: str = "scene") -> Scene:
    """Return the scene that TOML text describes.

    Parameters
    ----------
    text : str
        The document.
    name : str
        Name of the recording, unless the document has a `name`.

    Returns
    -------
    Scene
        The scene.

    Raises
    ------
    UsageError
        As :func:`load_scene`.

    Examples
    --------
    >>> scene_from_toml("duration_s = 2\\nsample_rate_hz = 16000\\nseed = 1").seed
    1
    """
    try:
        tree = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _unusable(f"is not TOML: {error}", "correct the line") from error
    return cast(Scene, _build(Scene, {"name": name} | tree, where=""))


def scene_to_toml(scene: Scene) -> str:
    """Return a scene as TOML text that :func:`scene_from_toml` turns into the same scene.

    Parameters
    ----------
    scene : Scene
        The scene.

    Returns
    -------
    str
        The document.
    """
    return "\n".join(_lines(scene.to_dict(), prefix="")).lstrip("\n") + "\n"


def _lines(tree: dict[str, Any], *, prefix: str) -> list[str]:
    lines = []
    nested = {}
    for name, value in tree.items():
        if isinstance(value, dict) or (isinstance(value, list) and isinstance(value[0], dict)):
            nested[name] = value
        else:
            lines.append(f"{name} = {_literal(value)}")
    for name, value in nested.items():
        heading = f"{prefix}{name}"
        for item in value if isinstance(value, list) else [value]:
            mark = f"[[{heading}]]" if isinstance(value, list) else f"[{heading}]"
            lines += ["", mark, *_lines(item, prefix=heading + ".")]
    return lines


def _literal(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        escaped = value.replace("\\", "\\\\").replace('"', '\\"').replace("\n", "\\n")
        return f'"{escaped}"'
    if isinstance(value, list):
        return f"[{', '.join(_literal(item) for item in value)}]"
    return repr(value)


def _build(kind: type, tree: dict[str, Any], *, where: str) -> object:
    """Make a dataclass from a table, by its field types."""
    kinds = typing.get_type_hints(kind)
    for key in tree:
        if key not in kinds:
            nearest = difflib.get_close_matches(key, kinds, n=1, cutoff=0.0)[0]
            reason = f"unknown key {where + key!r}"
            raise _unusable(reason, f"the nearest known key is {where + nearest!r}")
    for field in fields(kind):
        needed = field.default is MISSING and field.default_factory is MISSING
        if needed and field.name not in tree:
            raise _unusable(f"key {where + field.name!r} is missing", "add it")
    values = {key: _convert(kinds[key], value, where + key) for key, value in tree.items()}
    return kind(**values)


def _convert(kind: Any, value: Any, where: str) -> object:
    """Return a TOML value as the type a field wants."""
    options = [option for option in typing.get_args(kind) if option is not NoneType]
    if typing.get_origin(kind) is tuple:
        if not isinstance(value, list):
            raise _unusable(f"{where}={value!r} is not a list", "write it as a list")
        return tuple(_convert(options[0], item, where) for item in value)
    if NoneType in typing.get_args(kind):
        return _convert(options[0], value, where)
    if hasattr(kind, "__dataclass_fields__"):
        if not isinstance(value, dict):
            raise _unusable(f"{where}={value!r} is not a table", "write it as a table")
        return _build(kind, value, where=where + ".")
    if kind is float and isinstance(value, int) and not isinstance(value, bool):
        return float(value)
    if type(value) is not kind:
        wanted = {"int": "a whole number", "float": "a number", "str": "text", "bool": "true/false"}
        raise _unusable(f"{where}={value!r} is not {wanted[kind.__name__]}", "correct it")
    return value


def _unusable(reason: str, next_step: str) -> UsageError:
    return UsageError(Notice("E611", "scene", reason, next_step))
