"""Decoded audio from any file the decoder knows, with its damage found and named."""

from __future__ import annotations

import errno
import os
import stat
import tempfile
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import PurePath
from types import TracebackType
from typing import BinaryIO

import numpy as np
import soundfile
from numpy.typing import NDArray

from whistler.broadcastwave import BroadcastTime, read_broadcast_time
from whistler.containers import ENDINGS, container_of, cut_short
from whistler.errors import Notice, RecordingError
from whistler.riff import ByteWindow, RiffLayout, read_layout
from whistler.stopping import undisturbed

STANDARD_ERROR = 2
LOWEST_RATE_HZ, HIGHEST_RATE_HZ = 8_000, 200_000
MAX_CHANNELS = 64
PIECE_FRAMES = 2**16
PROBE_FRAMES = 256  # read to see whether audio can be decoded again
FIRST_STEP_FRAMES = 1_024
LONGEST_STEP_FRAMES = 2**26
UNKNOWN_FRAMES = 2**60  # larger totals in a header mean that nobody knows


class AudioFile:
    """One audio file, open for decoding; use it in a ``with`` statement.

    Parameters
    ----------
    path : str
        File to read; only its content decides the format.

    Raises
    ------
    RecordingError
        When the file cannot be opened, is not audio, or is outside the supported rates.

    Attributes
    ----------
    container : str
        ``WAV``, ``FLAC``, ``OGG``, ``AIFF``, ``W64``, ``CAF``, ``AU`` or ``MP3``.
    sample_rate_hz, channels : int
        As the header says.
    subtype : str
        Sample format, in the decoder's words (``PCM_16`` ...).
    broadcast : BroadcastTime or None
        Time stamp in the file.
    notices : list of Notice
        What was wrong with it; grows while it is read.
    lost_frames : list of (int, int)
        Stretches (first, past the last) that could not be decoded; delivered as zeros.
    """

    def __init__(self, path: str) -> None:
        self.path = path
        self.notices: list[Notice] = []
        self.lost_frames: list[tuple[int, int]] = []
        self.broadcast: BroadcastTime | None = None
        self._layout: RiffLayout | None = None
        self._complaints: BinaryIO | None = None
        with ExitStack() as held:
            self.descriptor, self.size = _open_regular(path)
            held.callback(os.close, self.descriptor)
            self.container = _container(path, self.descriptor)
            if self.container == "MP3":  # whose decoder writes about damage to standard error
                self._complaints = held.enter_context(tempfile.TemporaryFile())
            self._window = self._audio_bytes()
            self._sound = self._open_decoder()
            self._check_header()
            self._held = held.pop_all()

    def __enter__(self) -> AudioFile:
        """Return the file itself."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Close the file."""
        with self._decoder():
            self._sound.close()
        self._held.close()

    def pieces(self) -> Iterator[NDArray[np.float32]]:
        """Yield the audio in order, each piece (frames, channels); lost frames come as zeros.

        Notes
        -----
        A read that meets damage loses its whole piece and leaves the decoder dead. So the file is
        opened again at the last good frame and read in ever smaller pieces, then at ever larger
        steps past the damage.
        """
        position, wanted = 0, PIECE_FRAMES
        while True:
            data = self._read(wanted)
            if data is not None and not len(data):
                break
            if data is not None:
                position += len(data)
                yield data
            elif wanted > 1:
                wanted //= 4
                self._reopen(position)
            else:
                resumed = self._step_over(position)
                if resumed is None:
                    break
                yield from _zeros(resumed - position, self.channels)
                self.lost_frames.append((position, resumed))
                position, wanted = resumed, PIECE_FRAMES
        self._report(position)

    @property
    def declared_frames(self) -> int | None:
        """Frames the header promises; None when it does not know."""
        frames = int(self._sound.frames)
        layout = self._layout
        if layout is not None and layout.state == "truncated" and layout.data_size:
            return frames * layout.declared_size // layout.data_size
        return frames if 0 < frames < UNKNOWN_FRAMES else None

    @contextmanager
    def _decoder(self) -> Iterator[None]:
        """Call the decoder; no signal's exception is lost in its C code, and it stays silent."""
        with undisturbed(), ExitStack() as restored:
            if self._complaints is not None:
                kept = os.dup(STANDARD_ERROR)
                restored.callback(os.close, kept)
                restored.callback(os.dup2, kept, STANDARD_ERROR)
                os.dup2(self._complaints.fileno(), STANDARD_ERROR)
            yield

    def _audio_bytes(self) -> ByteWindow:
        if self.container != "WAV":
            cut = cut_short(self.descriptor, self.container, size=self.size)
            if cut is not None:
                self.notices.append(Notice("W104", self.path, cut, "measured what is there"))
            return ByteWindow(self.descriptor, header=b"", offset=0, size=self.size)
        try:
            layout = read_layout(self.descriptor, self.size)
        except ValueError as error:
            raise _refusal("E102", self.path, str(error)) from error
        if layout.bext is not None:
            self.broadcast = read_broadcast_time(self.descriptor, layout.bext, order=layout.order)
        self._layout = layout
        self.notices += _length_notices(self.path, layout)
        return ByteWindow(
            self.descriptor,
            header=layout.clean_header(),
            offset=layout.data_offset,
            size=layout.data_size,
        )

    def _open_decoder(self) -> soundfile.SoundFile:
        self._window.seek(0)
        try:
            with self._decoder():
                return soundfile.SoundFile(self._window)
        except (soundfile.LibsndfileError, TypeError, ValueError) as error:
            reason = f"{self.container} header, but not decodable ({_plain(error)})"
            raise _refusal("E103", self.path, reason) from error

    def _check_header(self) -> None:
        self.sample_rate_hz = int(self._sound.samplerate)
        self.channels = int(self._sound.channels)
        self.subtype = str(self._sound.subtype)
        if not LOWEST_RATE_HZ <= self.sample_rate_hz <= HIGHEST_RATE_HZ:
            allowed = f"outside {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz"
            reason = f"sample rate {self.sample_rate_hz} Hz is {allowed}"
            raise _refusal("E112", self.path, reason)
        if not 1 <= self.channels <= MAX_CHANNELS:
            reason = f"{self.channels} channels is outside 1 to {MAX_CHANNELS}"
            raise _refusal("E112", self.path, reason)
        ending = PurePath(self.path).suffix.lower()
        if ending not in ENDINGS[self.container]:
            reason = f"the content is {self.container}"
            self.notices.append(Notice("N101", self.path, reason, f"read as {self.container}"))

    def _read(self, frames: int) -> NDArray[np.float32] | None:
        """Return the next frames, an empty array at the end, None on damage."""
        try:
            with self._decoder():
                data: NDArray[np.float32] = self._sound.read(
                    frames, dtype="float32", always_2d=True
                )
        except (soundfile.LibsndfileError, RuntimeError):
            return None
        return data

    def _reopen(self, position: int) -> bool:
        """Whether a fresh decoder stands at that frame."""
        self._sound.close()
        self._sound = self._open_decoder()
        try:
            with self._decoder():
                return bool(self._sound.seek(position) == position)
        except (soundfile.LibsndfileError, RuntimeError):
            return False

    def _step_over(self, position: int) -> int | None:
        """Return the first frame past the damage that can be decoded, or None."""
        step = FIRST_STEP_FRAMES
        end = self.declared_frames
        while end is not None and position + step < end and step <= LONGEST_STEP_FRAMES:
            target = position + step
            if self._reopen(target) and self._read(PROBE_FRAMES) is not None:
                self._reopen(target)
                return target
            step *= 2
        return None

    def _report(self, delivered: int) -> None:
        """Add the notices that only a complete read can give."""
        rate, declared = self.sample_rate_hz, self.declared_frames
        if self._window.error is not None:
            reason = f"read error after {delivered / rate:.2f} s ({self._window.error.strerror})"
            self.notices.append(Notice("W104", self.path, reason, "measured up to there"))
        elif declared is not None and delivered < declared:
            reason = (
                f"truncated: {declared / rate:.2f} s announced, {delivered / rate:.2f} s present"
            )
            self.notices.append(Notice("W104", self.path, reason, "measured what is there"))
        if self._complaints is not None and os.fstat(self._complaints.fileno()).st_size:
            reason = "the decoder met damage, whose place and length it does not tell"
            consequence = "measured what it gave; times after the damage may be off"
            self.notices.append(Notice("W108", self.path, reason, consequence))
        for first, last in self.lost_frames:
            span = f"damaged from {first / rate:.2f} s to {last / rate:.2f} s"
            reason = f"{span} ({(last - first) / rate:.2f} s lost)"
            self.notices.append(Notice("W108", self.path, reason, "measured the rest"))


def _open_regular(path: str) -> tuple[int, int]:
    """Return descriptor and length of a regular, non-empty file; a pipe is refused at once."""
    try:
        descriptor = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_CLOEXEC)
    except (OSError, ValueError) as error:
        missing = isinstance(error, OSError) and error.errno == errno.ENOENT
        reason = "no such file" if missing else f"cannot be opened ({_plain(error)})"
        raise _refusal("E101" if missing else "E113", path, reason) from error
    status = os.fstat(descriptor)
    if stat.S_ISREG(status.st_mode) and status.st_size:
        return descriptor, status.st_size
    os.close(descriptor)
    if stat.S_ISREG(status.st_mode):
        raise _refusal("E102", path, "empty file (0 bytes)")
    if stat.S_ISDIR(status.st_mode):
        notice = Notice("E113", path, "a folder, not a recording", "use 'whistler night' for it")
        raise RecordingError(notice)
    raise _refusal("E113", path, "not a regular file")


def _container(path: str, descriptor: int) -> str:
    """Return the container by content, or refuse the file."""
    container = container_of(descriptor)
    if container is None:
        shown = os.pread(descriptor, 8, 0).decode("ascii", "backslashreplace")
        raise _refusal("E102", path, f"not an audio file (starts with {shown!r})")
    return container


def _length_notices(path: str, layout: RiffLayout) -> list[Notice]:
    """Return what is to be said about the header's length against the file's."""
    present = layout.data_size // layout.frame_size
    declared = layout.declared_size // layout.frame_size
    if layout.state == "unfinished":
        reason = f"length in the header never filled in; {present} frames present"
        return [Notice("W105", path, reason, "measured all of them")]
    if layout.state == "too-small":
        reason = f"header says {declared} frames, the file holds {present}"
        return [Notice("W106", path, reason, "measured all of them")]
    if layout.state == "wrapped":
        reason = f"length in the header ran over at 4 GiB; {present} frames present"
        return [Notice("W107", path, reason, "measured all of them")]
    return []


def _zeros(frames: int, channels: int) -> Iterator[NDArray[np.float32]]:
    while frames > 0:
        count = min(frames, PIECE_FRAMES)
        yield np.zeros((count, channels), np.float32)
        frames -= count


def _refusal(code: str, path: str, reason: str) -> RecordingError:
    return RecordingError(Notice(code, path, reason, "skipped"))


def _plain(error: Exception) -> str:
    """Return the gist of an error in one short phrase."""
    if isinstance(error, OSError) and error.strerror:
        return error.strerror
    if isinstance(error, soundfile.LibsndfileError):
        return str(error.error_string).rstrip(".")
    return str(error) or type(error).__name__
