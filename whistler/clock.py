"""When a recording began, and by which rule that is known."""

from __future__ import annotations

import re
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import PurePath

from whistler.broadcastwave import BroadcastTime
from whistler.errors import Notice, UsageError
from whistler.station import TIME_DIRECTIVES, Station

DEFAULT_PATTERNS = ("%Y%m%dT%H%M%SZ", "%Y-%m-%dT%H-%M-%SZ")
DEFAULT_DECIMAL_YEAR = 2025.0


@dataclass(frozen=True)
class StartTime:
    """A start time and the rule that gave it.

    Parameters
    ----------
    time : datetime or None
        Time of the first frame, UTC; None when nothing tells it.
    source : str
        ``--start``, ``station file``, ``bext``, ``file name`` or ``unknown``.
    """

    time: datetime | None
    source: str


def start_time(
    path: str,
    *,
    given: datetime | None = None,
    station: Station | None = None,
    broadcast: BroadcastTime | None = None,
    sample_rate_hz: float = 48_000.0,
) -> StartTime:
    """Return when a recording began, by the first rule that applies.

    Parameters
    ----------
    path : str
        The recording; only its name is used.
    given : datetime or None
        Time the user states; taken as it is.
    station : Station or None
        Its file name pattern comes next, and its clock offset is added to every recorder time.
    broadcast : BroadcastTime or None
        Time stamp inside the file, third.
    sample_rate_hz : float
        Frames per second of that stamp, Hz.

    Returns
    -------
    StartTime

    Notes
    -----
    Last come the patterns ``YYYYMMDDThhmmssZ`` and ``YYYY-MM-DDThh-mm-ssZ`` in the name. The
    modification time of the file is never used: copying changes it.

    Examples
    --------
    >>> start_time("skarnmoor_20250314T021500Z.flac")
    StartTime(time=datetime.datetime(2025, 3, 14, 2, 15, tzinfo=datetime.timezone.utc), \
source='file name')
    """
    if given is not None:
        return StartTime(given.astimezone(UTC), "--start")
    station = station or Station()
    offset = timedelta(seconds=station.clock_offset_s)
    name = PurePath(path).name
    if station.file_time_pattern:
        found = find_time(name, station.file_time_pattern)
        if found is not None:
            return StartTime(found + offset, "station file")
    if broadcast is not None:
        return StartTime(broadcast.start(sample_rate_hz) + offset, "bext")
    for pattern in DEFAULT_PATTERNS:
        found = find_time(name, pattern)
        if found is not None:
            return StartTime(found + offset, "file name")
    return StartTime(None, "unknown")


def find_time(name: str, pattern: str) -> datetime | None:
    """Return the UTC time that a name contains in a ``strftime`` pattern, or None.

    Parameters
    ----------
    name : str
        File name.
    pattern : str
        Pattern of the directives in :data:`whistler.station.TIME_DIRECTIVES`.

    Returns
    -------
    datetime or None

    Examples
    --------
    >>> find_time("vlf-250314-0215.wav", "%y%m%d-%H%M").isoformat()
    '2025-03-14T02:15:00+00:00'
    """
    parts = re.split(r"(%.)", pattern)
    expression = "".join(TIME_DIRECTIVES.get(part, re.escape(part)) for part in parts)
    for found in re.finditer(rf"(?<!\d){expression}(?!\d)", name):
        try:
            return datetime.strptime(found.group(), pattern).replace(tzinfo=UTC)
        except ValueError:  # digits that are no date
            continue
    return None


def parse_time(text: str) -> datetime:
    """Return the UTC time that an ISO 8601 text states; without a zone it is UTC.

    Parameters
    ----------
    text : str
        Such as ``2025-03-14T02:15:00Z``.

    Returns
    -------
    datetime

    Raises
    ------
    UsageError
        When the text is no such time.

    Examples
    --------
    >>> parse_time("2025-03-14T03:15:00+01:00").isoformat()
    '2025-03-14T02:15:00+00:00'
    """
    try:
        time = datetime.fromisoformat(text)
    except ValueError as error:
        notice = Notice("E603", text, "not an ISO 8601 time", "write it as 2025-03-14T02:15:00Z")
        raise UsageError(notice) from error
    return time.replace(tzinfo=UTC) if time.tzinfo is None else time.astimezone(UTC)


def iso_time(time: datetime | None) -> str | None:
    """Return ISO 8601 text with milliseconds and Z, or None for None.

    Examples
    --------
    >>> iso_time(datetime(2025, 3, 14, 2, 15, tzinfo=UTC))
    '2025-03-14T02:15:00.000Z'
    """
    if time is None:
        return None
    rounded = time.astimezone(UTC) + timedelta(microseconds=500)
    return rounded.replace(tzinfo=None).isoformat(timespec="milliseconds") + "Z"


def decimal_year(time: datetime | None) -> float:
    """Return the date as a decimal year, for the epoch of the dipole; 2025.0 when unknown.

    Examples
    --------
    >>> decimal_year(datetime(2024, 7, 2, tzinfo=UTC))
    2024.5
    """
    if time is None:
        return DEFAULT_DECIMAL_YEAR
    time = time.astimezone(UTC)
    begin = datetime(time.year, 1, 1, tzinfo=UTC)
    return time.year + (time - begin) / (datetime(time.year + 1, 1, 1, tzinfo=UTC) - begin)
