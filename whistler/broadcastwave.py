"""The time stamp in the broadcast extension (``bext``) chunk of a WAV file."""

from __future__ import annotations

import os
import re
import struct
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta

from whistler.riff import Chunk

FIXED_SIZE = 602  # bytes before the coding history, EBU Tech 3285 v2, section 2.3
DATE_OFFSET, DATE_SIZE = 320, 18
REFERENCE_OFFSET = 338


@dataclass(frozen=True)
class BroadcastTime:
    """When a recording began, as its recorder wrote it down.

    Parameters
    ----------
    origination : datetime
        Date and time of the recording, 1 s resolution, taken as UTC.
    frames_since_midnight : int
        Frames between midnight and the first frame.
    """

    origination: datetime
    frames_since_midnight: int

    def start(self, sample_rate_hz: float) -> datetime:
        """Return the time of the first frame, UTC, from the frame count where there is one.

        A count of 0 beside a time of day other than midnight means that the recorder left it out.
        """
        if not self.frames_since_midnight:
            return self.origination
        midnight = self.origination.replace(hour=0, minute=0, second=0)
        return midnight + timedelta(seconds=self.frames_since_midnight / sample_rate_hz)


def read_broadcast_time(descriptor: int, chunk: Chunk, *, order: str = "<") -> BroadcastTime | None:
    """Return the time stamp of a ``bext`` chunk, or None when it holds no usable date.

    Parameters
    ----------
    descriptor : int
        Open file descriptor.
    chunk : Chunk
        The chunk, from the layout of the file.
    order : str
        Byte order as in :mod:`struct`.

    Returns
    -------
    BroadcastTime or None

    Notes
    -----
    EBU Tech 3285: description 256 bytes, originator 32, originator reference 32, date 10
    (yyyy-mm-dd), time 8 (hh-mm-ss), time reference 8, version 2, and so on to 602 bytes. The
    separators of date and time may be any of ``- _ : . space``. No time zone is stored: UTC.
    """
    body = os.pread(descriptor, min(chunk.size, FIXED_SIZE), chunk.offset)
    if len(body) < REFERENCE_OFFSET + 8:
        return None
    text = body[DATE_OFFSET : DATE_OFFSET + DATE_SIZE].decode("ascii", "replace")
    found = re.match(
        r"(\d{4})[-_:. ](\d\d)[-_:. ](\d\d)(?:(\d\d)[-_:. ](\d\d)[-_:. ](\d\d))?", text
    )
    low, high = struct.unpack_from(order + "II", body, REFERENCE_OFFSET)  # low word first
    if found is None:
        return None
    try:
        year, month, day, hour, minute, second = (int(part or 0) for part in found.groups())
        origination = datetime(year, month, day, hour, minute, second, tzinfo=UTC)
    except ValueError:
        return None
    return BroadcastTime(origination, low + (high << 32))
