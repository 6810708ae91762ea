"""A receiving station: where it is, how its clock and its files behave, the ionosphere above it."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from whistler.errors import Notice, UsageError

TIME_DIRECTIVES = {
    "%Y": r"\d{4}",
    "%y": r"\d\d",
    "%m": r"\d\d",
    "%d": r"\d\d",
    "%j": r"\d{3}",
    "%H": r"\d\d",
    "%M": r"\d\d",
    "%S": r"\d\d",
    "%f": r"\d{1,6}",
    "%%": "%",
}
"""Directives a file name pattern may use, each with the expression that finds it."""


@dataclass(frozen=True)
class Station:
    """What is known about a receiver; every part may be left out.

    Parameters
    ----------
    name : str
        Free text, for tables and figures.
    latitude_deg, longitude_deg : float or None
        Geodetic position, deg north and east; None when unknown.
    altitude_m : float
        Height above sea level, m.
    mains_hz : int
        Frequency of the public power supply, 50 or 60 Hz.
    file_time_pattern : str or None
        ``strftime`` pattern that the recordings' file names contain, in UTC.
    clock_offset_s : float
        Seconds to add to the recorder's time to get UTC.
    clock_sd_s : float
        One-sigma uncertainty of the clock, s.
    fo_f2_mhz : float
        Critical frequency of the F2 layer, MHz.
    hm_f2_km : float
        Altitude of the F2 peak, km.
    scale_height_km : float
        Scale height of the F2 layer, km.
    fo_f2_sd_mhz, hm_f2_sd_km : float or None
        One-sigma of the layer's critical frequency and peak altitude, where they are known better
        than the settings take for granted.
    channel_names : tuple of str
        Names of the recording's channels (antennas) in file order; empty when they have none.

    Examples
    --------
    >>> Station(name="Skarnmoor", mains_hz=60).peak_altitude_m
    300000.0
    """

    name: str = ""
    latitude_deg: float | None = None
    longitude_deg: float | None = None
    altitude_m: float = 0.0
    mains_hz: int = 50
    file_time_pattern: str | None = None
    clock_offset_s: float = 0.0
    clock_sd_s: float = 0.0
    fo_f2_mhz: float = 5.0
    hm_f2_km: float = 300.0
    scale_height_km: float = 60.0
    fo_f2_sd_mhz: float | None = None
    hm_f2_sd_km: float | None = None
    channel_names: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Check every value against its allowed range."""
        faults = [fault for key in _KEYS for fault in key.faults(getattr(self, key.field))]
        if faults:
            raise UsageError(_notice("station", faults))

    @property
    def critical_frequency_hz(self) -> float:
        """Critical frequency of the F2 layer, Hz."""
        return self.fo_f2_mhz * 1e6

    @property
    def peak_altitude_m(self) -> float:
        """Altitude of the F2 peak, m."""
        return self.hm_f2_km * 1e3

    @property
    def scale_height_m(self) -> float:
        """Scale height of the F2 layer, m."""
        return self.scale_height_km * 1e3

    def to_dict(self) -> dict[str, Any]:
        """Return the station with the keys of the station file, ready for JSON."""
        tree: dict[str, Any] = {}
        for key in _KEYS:
            value = getattr(self, key.field)
            branch = tree.setdefault(key.table, {}) if key.table else tree
            branch[key.name] = list(value) if isinstance(value, tuple) else value
        return tree


@dataclass(frozen=True)
class _Key:
    """One key of the station file: where it stands, where it goes, what it may hold."""

    path: str  # dotted, as in the file
    field: str
    kind: str = "number"
    low: float = float("-inf")
    high: float = float("inf")

    @property
    def table(self) -> str:
        return self.path.rpartition(".")[0]

    @property
    def name(self) -> str:
        return self.path.rpartition(".")[2]

    def faults(self, value: Any) -> Iterator[str]:
        """Yield a line for a value of the wrong type or outside its range."""
        if value is None and self.field in _OPTIONAL:
            return
        if self.kind in ("text", "pattern"):
            if not isinstance(value, str):
                yield f"{self.path}={value!r} must be text"
            elif self.kind == "pattern":
                yield from _pattern_faults(self.path, value)
        elif self.kind == "texts":
            if not all(isinstance(item, str) for item in value):
                yield f"{self.path}={value!r} must be a list of texts, one per channel"
        elif isinstance(value, bool) or not isinstance(value, int | float):
            yield f"{self.path}={value!r} must be a number"
        elif self.kind == "mains" and value not in (50, 60):
            yield f"{self.path}={value:g} must be 50 or 60"
        elif not self.low <= value <= self.high:
            yield f"{self.path}={value:g} is outside {self.low:g} to {self.high:g}"


_OPTIONAL = ("latitude_deg", "longitude_deg", "file_time_pattern", "fo_f2_sd_mhz", "hm_f2_sd_km")
_KEYS = (
    _Key("name", "name", "text"),
    _Key("latitude_deg", "latitude_deg", low=-90, high=90),
    _Key("longitude_deg", "longitude_deg", low=-180, high=360),
    _Key("altitude_m", "altitude_m", low=-500, high=9000),
    _Key("mains_hz", "mains_hz", "mains"),
    _Key("file_time_pattern", "file_time_pattern", "pattern"),
    _Key("clock.offset_s", "clock_offset_s", low=-1e6, high=1e6),
    _Key("clock.sd_s", "clock_sd_s", low=0, high=3600),
    _Key("ionosphere.fo_f2_mhz", "fo_f2_mhz", low=0.5, high=30),
    _Key("ionosphere.hm_f2_km", "hm_f2_km", low=150, high=700),
    _Key("ionosphere.scale_height_km", "scale_height_km", low=10, high=200),
    _Key("ionosphere.fo_f2_sd_mhz", "fo_f2_sd_mhz", low=0, high=10),
    _Key("ionosphere.hm_f2_sd_km", "hm_f2_sd_km", low=0, high=200),
    _Key("audio.channels", "channel_names", "texts"),
)
_PATHS = {key.path: key for key in _KEYS}
_TABLES = {key.table for key in _KEYS if key.table}


def load_station(path: Path) -> Station:
    """Return the station that a TOML file describes.

    Parameters
    ----------
    path : Path
        Station file; its keys are those of :class:`Station` in the contract's layout.

    Returns
    -------
    Station

    Raises
    ------
    UsageError
        When the file cannot be read, is not TOML, or holds an unknown key, a wrong type or a value
        outside its range. All faults are in the one message.
    """
    try:
        tree = tomllib.loads(Path(path).read_bytes().decode("utf-8"))
    except OSError as error:
        raise UsageError(_notice(path, [f"cannot be read ({error.strerror})"])) from error
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise UsageError(_notice(path, [f"is not TOML ({error})"])) from error
    return station_from_dict(tree, path=path)


def station_from_dict(tree: dict[str, Any], *, path: Path) -> Station:
    """Return the station that the keys of a station file describe: back from ``to_dict``.

    Parameters
    ----------
    tree : dict
        Keys and tables as in the file.
    path : Path
        Where they come from, for messages.

    Raises
    ------
    UsageError
        When it holds an unknown key, a wrong type or a value outside its range.
    """
    values: dict[str, Any] = {}
    faults: list[str] = []
    for dotted, value in _flatten(tree):
        key = _PATHS.get(dotted)
        if key is None:
            faults.append(_unknown(dotted))
        elif key.kind == "texts" and not isinstance(value, list):
            faults.append(f"{dotted}={value!r} must be a list of texts, one per channel")
        else:
            value = tuple(value) if isinstance(value, list) else value
            faults.extend(key.faults(value))
            values[key.field] = value
    if faults:
        raise UsageError(_notice(path, faults))
    return Station(**values)


def _flatten(tree: dict[str, Any]) -> Iterator[tuple[str, Any]]:
    """Yield (dotted key, value) over the file; only the known tables are entered."""
    for name, value in tree.items():
        if name in _TABLES and isinstance(value, dict):
            yield from ((f"{name}.{inner}", item) for inner, item in value.items())
        else:
            yield name, value


def _pattern_faults(path: str, pattern: str) -> Iterator[str]:
    """Yield a line for a file name pattern that cannot give a date."""
    used = re.findall(r"%.?", pattern)
    unknown = [directive for directive in used if directive not in TIME_DIRECTIVES]
    if unknown:
        known = " ".join(TIME_DIRECTIVES)
        yield f"{path}={pattern!r} uses {unknown[0]!r} (known directives: {known})"
    elif not ({"%Y", "%y"} & set(used) and ({"%m", "%d"} <= set(used) or "%j" in used)):
        yield f"{path}={pattern!r} does not hold a whole date (%Y%m%d)"
    elif len(used) != len(set(used)):
        yield f"{path}={pattern!r} uses a directive twice"


def _unknown(dotted: str) -> str:
    """Return the fault line of an unknown key, naming the nearest known one."""
    near = difflib.get_close_matches(dotted, _PATHS, n=1, cutoff=0.5)
    if not near:  # a right name in the wrong table
        name = dotted.rpartition(".")[2]
        near = [key.path for key in _KEYS if difflib.get_close_matches(name, [key.name])][:1]
    hint = f"did you mean {near[0]!r}" if near else f"known keys: {', '.join(_PATHS)}"
    return f"unknown key {dotted!r} ({hint})"


def _notice(path: object, faults: list[str]) -> Notice:
    return Notice("E602", str(path), ", ".join(faults), "correct the station description")
