"""A walker over RIFF audio files (WAV, RF64) that trusts no length it reads.

Recorders lose power, and their headers then say 0 bytes, or 4 GiB, or more than there is. The
walker compares every length with the file and hands the decoder a clean header over the bytes
present. It also keeps other chunks away from the decoder, which never returns from some damaged
text chunks.
"""

from __future__ import annotations

import io
import os
import struct
from collections.abc import Iterator
from dataclasses import dataclass

MAX_CHUNKS = 4096
MAX_FORMAT_BYTES = 4096
WRAP = 2**32
UNFINISHED = (0, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF)


@dataclass(frozen=True)
class Chunk:
    """One chunk: its name and where its body lies.

    Parameters
    ----------
    name : bytes
        Four bytes.
    offset : int
        First byte of the body.
    size : int
        Length the header claims, bytes.
    """

    name: bytes
    offset: int
    size: int


@dataclass(frozen=True)
class RiffLayout:
    """What a RIFF audio file holds.

    Parameters
    ----------
    order : str
        ``"<"`` or ``">"``, as in :mod:`struct`.
    format_body : bytes
        Body of the ``fmt`` chunk.
    fact_body : bytes
        Body of the ``fact`` chunk, empty without one.
    bext : Chunk or None
        Broadcast extension, before or after the audio.
    data_offset, data_size : int
        Where the audio bytes really are.
    declared_size : int
        Length of the audio that the header claims, bytes.
    state : str
        ``whole``, ``truncated``, ``unfinished``, ``too-small`` or ``wrapped``.
    """

    order: str
    format_body: bytes
    fact_body: bytes
    bext: Chunk | None
    data_offset: int
    data_size: int
    declared_size: int
    state: str

    @property
    def frame_size(self) -> int:
        """Bytes in one frame (block align of the format), at least 1."""
        return max(1, int(struct.unpack_from(self.order + "H", self.format_body, 12)[0]))

    def clean_header(self) -> bytes:
        """Return a header of only format and audio, with true lengths."""
        body = self._part(b"fmt ", self.format_body)
        if self.fact_body:
            body += self._part(b"fact", self.fact_body)
        total = 4 + len(body) + 8 + self.data_size
        if total < WRAP - 1:
            magic = b"RIFF" if self.order == "<" else b"RIFX"
            start = magic + struct.pack(self.order + "I", total) + b"WAVE"
            return start + body + b"data" + struct.pack(self.order + "I", self.data_size)
        sizes = struct.pack(
            "<QQQI", total + 36, self.data_size, self.data_size // self.frame_size, 0
        )
        unknown = struct.pack("<I", WRAP - 1)
        start = b"RF64" + unknown + b"WAVE" + self._part(b"ds64", sizes)
        return start + body + b"data" + unknown

    def _part(self, name: bytes, body: bytes) -> bytes:
        padding = b"\0" * (len(body) % 2)
        return name + struct.pack(self.order + "I", len(body)) + body + padding


def read_layout(descriptor: int, size: int) -> RiffLayout:
    """Return where the audio of a RIFF file lies, whatever its header claims.

    Parameters
    ----------
    descriptor : int
        Open file descriptor; its position is not used.
    size : int
        Length of the file, bytes.

    Returns
    -------
    RiffLayout

    Raises
    ------
    ValueError
        When the file has no format or no audio, with the reason.
    """
    magic = os.pread(descriptor, 12, 0)
    if magic[8:12] != b"WAVE":
        raise ValueError("a RIFF file without audio")
    order = ">" if magic[:4] == b"RIFX" else "<"
    long_data: int | None = None
    bodies: dict[bytes, Chunk] = {}
    for chunk in _chunks(descriptor, offset=12, size=size, order=order):
        if chunk.name == b"ds64":
            long_data = _long_data_size(descriptor, chunk)
        bodies.setdefault(chunk.name, chunk)
        if chunk.name == b"data":
            break
    if b"fmt " not in bodies or bodies[b"fmt "].size < 16:
        raise ValueError("no audio format in the header")
    if b"data" not in bodies:
        raise ValueError("the file ends before its audio begins")
    data = bodies[b"data"]
    declared = long_data if long_data and data.size == WRAP - 1 else data.size
    data_size, state = _true_size(descriptor, data.offset, declared, size=size, order=order)
    for chunk in _chunks(descriptor, offset=_after(data.offset, data_size), size=size, order=order):
        bodies.setdefault(chunk.name, chunk)
    return RiffLayout(
        order=order,
        format_body=_body(descriptor, bodies[b"fmt "]),
        fact_body=_body(descriptor, bodies[b"fact"]) if b"fact" in bodies else b"",
        bext=bodies.get(b"bext"),
        data_offset=data.offset,
        data_size=data_size,
        declared_size=declared,
        state=state,
    )


def _chunks(descriptor: int, *, offset: int, size: int, order: str) -> Iterator[Chunk]:
    """Yield chunks from an offset to the end, to a broken one, or to MAX_CHUNKS."""
    for _ in range(MAX_CHUNKS):
        header = os.pread(descriptor, 8, offset)
        if len(header) < 8 or not _is_name(header[:4]):
            return
        claimed = struct.unpack(order + "I", header[4:])[0]
        yield Chunk(header[:4], offset + 8, claimed)
        offset = _after(offset + 8, claimed)
        if offset > size:
            return


def _after(offset: int, length: int) -> int:
    return offset + length + length % 2


def _is_name(name: bytes) -> bool:
    return all(0x20 <= byte < 0x7F for byte in name) and name.strip() != b""


def _body(descriptor: int, chunk: Chunk) -> bytes:
    return os.pread(descriptor, min(chunk.size, MAX_FORMAT_BYTES), chunk.offset)


def _long_data_size(descriptor: int, chunk: Chunk) -> int | None:
    body = os.pread(descriptor, 16, chunk.offset)
    return int(struct.unpack("<Q", body[8:])[0]) if len(body) == 16 else None


def _true_size(
    descriptor: int, offset: int, declared: int, *, size: int, order: str
) -> tuple[int, str]:
    """Return the length of the audio from header and file, and how far they agree."""
    present = max(0, size - offset)
    if declared > present:
        return present, "unfinished" if declared in UNFINISHED else "truncated"
    if present - declared >= WRAP:  # a 32-bit length that ran over
        return declared + (present - declared) // WRAP * WRAP, "wrapped"
    rest = _after(offset, declared)
    if size - rest < 8 or _holds_chunk(descriptor, rest, size=size, order=order):
        return declared, "whole"
    return present, "unfinished" if declared in UNFINISHED else "too-small"


def _holds_chunk(descriptor: int, offset: int, *, size: int, order: str) -> bool:
    """Whether a whole chunk stands there, so that the audio before it had the length it claims."""
    chunk = next(_chunks(descriptor, offset=offset, size=size, order=order), None)
    return chunk is not None and chunk.offset + chunk.size <= size


class ByteWindow(io.RawIOBase):
    """A seekable file: a header held in memory, then a stretch of an open file.

    Parameters
    ----------
    descriptor : int
        Open file descriptor.
    header : bytes
        Bytes that come first.
    offset, size : int
        The stretch of the file that follows, bytes.
    """

    def __init__(self, descriptor: int, *, header: bytes, offset: int, size: int) -> None:
        super().__init__()
        self.error: OSError | None = None
        self._descriptor = descriptor
        self._header = header
        self._offset = offset
        self._size = len(header) + size
        self._position = 0

    def readable(self) -> bool:
        """Return True."""
        return True

    def seekable(self) -> bool:
        """Return True."""
        return True

    def tell(self) -> int:
        """Return the position."""
        return self._position

    def seek(self, offset: int, whence: int = os.SEEK_SET, /) -> int:
        """Return the position after moving there."""
        base = {os.SEEK_SET: 0, os.SEEK_CUR: self._position, os.SEEK_END: self._size}[whence]
        self._position = max(0, base + offset)
        return self._position

    def readinto(self, buffer: bytearray | memoryview, /) -> int:  # type: ignore[override]
        """Return the count of bytes put into the buffer; a read error is kept and ends the file."""
        wanted = max(0, min(len(buffer), self._size - self._position))
        inside = self._position - len(self._header)
        if inside < 0:
            data = self._header[self._position : self._position + wanted]
        else:
            try:  # an exception may not pass through the decoder's C code
                data = os.pread(self._descriptor, wanted, self._offset + inside)
            except OSError as error:
                self.error = error
                data = b""
        buffer[: len(data)] = data
        self._position += len(data)
        return len(data)
