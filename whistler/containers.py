"""Which container a file is, and how long it says it is."""

from __future__ import annotations

import os
import struct

MAGICS = (
    ("WAV", b"RIFF"),
    ("WAV", b"RIFX"),
    ("WAV", b"RF64"),
    ("WAV", b"BW64"),
    ("FLAC", b"fLaC"),
    ("OGG", b"OggS"),
    ("AIFF", b"FORM"),
    ("W64", b"riff"),
    ("CAF", b"caff"),
    ("AU", b".snd"),
    ("MP3", b"ID3"),
)
ENDINGS = {
    "WAV": (".wav", ".wave", ".bwf", ".rf64", ".bw64"),
    "FLAC": (".flac",),
    "OGG": (".ogg", ".oga", ".opus"),
    "AIFF": (".aif", ".aiff", ".aifc"),
    "W64": (".w64",),
    "CAF": (".caf",),
    "AU": (".au", ".snd"),
    "MP3": (".mp3",),
}
HEAD_BYTES = 32
LONGEST_OGG_PAGE = 2**16
OGG_LAST_PAGE = 0x04
UNKNOWN_AU_SIZE = 0xFFFFFFFF


def container_of(descriptor: int) -> str | None:
    """Return the container by the first bytes of an open file, or None when it is no audio file.

    Parameters
    ----------
    descriptor : int
        Open file descriptor; its position is not used. The name decides nothing.
    """
    head = os.pread(descriptor, HEAD_BYTES, 0)
    for name, magic in MAGICS:
        if head.startswith(magic):
            return name
    mpeg_layer_3 = len(head) >= 2 and head[0] == 0xFF and head[1] & 0xE6 == 0xE2
    return "MP3" if mpeg_layer_3 else None


def cut_short(descriptor: int, container: str, *, size: int) -> str | None:
    """Return how a file shows that its end is missing, or None when nothing shows it.

    Parameters
    ----------
    descriptor : int
        Open file descriptor.
    container : str
        As :func:`container_of` says.
    size : int
        Length of the file, bytes.

    Notes
    -----
    The decoder shortens AIFF, W64 and AU to what is there without a word, and takes the last page
    of an Ogg file for its end. WAV and FLAC are looked at elsewhere.
    """
    head = os.pread(descriptor, HEAD_BYTES, 0).ljust(HEAD_BYTES, b"\0")
    announced = 0
    if container == "AIFF":
        announced = 8 + struct.unpack_from(">I", head, 4)[0]
    elif container == "W64":
        announced = struct.unpack_from("<Q", head, 16)[0]
    elif container == "AU":
        offset, length = struct.unpack_from(">II", head, 4)
        announced = offset + length if length != UNKNOWN_AU_SIZE else 0
    elif container == "OGG":
        tail = os.pread(descriptor, LONGEST_OGG_PAGE, max(0, size - LONGEST_OGG_PAGE))
        page = tail.rfind(b"OggS")
        if page < 0 or page + 5 >= len(tail) or not tail[page + 5] & OGG_LAST_PAGE:
            return "truncated: the last page is not marked as the end"
    if announced > size:
        return f"truncated: {announced} bytes announced, {size} present"
    return None
