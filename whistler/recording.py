"""A recording that has been looked over and can be read in blocks."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from whistler.audiofile import AudioFile
from whistler.clock import StartTime, start_time
from whistler.errors import Notice, RecordingError
from whistler.station import Station
from whistler.survey import Survey, Surveyor, mix

SHORTEST_S = 1.0
PARTIAL_CODES = frozenset({"W104", "W108"})  # part of the recording is missing


@dataclass(frozen=True)
class AudioBlock:
    """A stretch of one channel.

    Parameters
    ----------
    first_frame : int
        Position of the first sample in the recording.
    samples : ndarray of float32, shape (n,)
        Samples, full scale 1; 0 where not usable.
    usable : ndarray of bool, shape (n,)
        False where a sample was not finite, silent or lost to damage.
    sample_rate_hz : int
        Samples per second, Hz.
    """

    first_frame: int
    samples: NDArray[np.float32]
    usable: NDArray[np.bool_]
    sample_rate_hz: int


@dataclass(frozen=True)
class Recording:
    """What is known about a recording before it is analysed; made by :func:`open_recording`.

    Parameters
    ----------
    path : str
        As the user gave it.
    sample_rate_hz : int
        Frames per second, Hz; never resampled.
    frame_count : int
        Frames that can be read.
    channels : int
        Channels in the file.
    channel : int or "mean"
        Channel measured, counted from 1, or the mean of the live ones.
    start_time : datetime or None
        Time of the first frame, UTC.
    start_time_source : str
        The rule that gave it.
    notices : tuple of Notice
        What was found wrong with file and samples.
    container : str
        ``WAV``, ``FLAC`` ...
    digest_sha256 : str
        SHA-256 of the file, hexadecimal.
    dead_channels : tuple of int
        Channels that hold one value throughout, counted from 1.
    unusable_frames : tuple of (int, int)
        Stretches (first, past the last) that are silent or were lost to damage.
    """

    path: str
    sample_rate_hz: int
    frame_count: int
    channels: int
    channel: int | str
    start_time: datetime | None
    start_time_source: str
    notices: tuple[Notice, ...] = ()
    container: str = "WAV"
    digest_sha256: str = ""
    dead_channels: tuple[int, ...] = ()
    unusable_frames: tuple[tuple[int, int], ...] = ()

    @property
    def duration_s(self) -> float:
        """Length of what can be read, s."""
        return self.frame_count / self.sample_rate_hz

    @property
    def live_time_s(self) -> float:
        """Length of what can be analysed, s."""
        covered, end = 0, 0
        for first, last in sorted(self.unusable_frames):
            covered += max(0, last - max(first, end))
            end = max(end, last)
        return (self.frame_count - covered) / self.sample_rate_hz

    @property
    def complete(self) -> bool:
        """Whether nothing that the file should hold is missing."""
        return not any(notice.code in PARTIAL_CODES for notice in self.notices)

    def time_at(self, time_s: float) -> datetime | None:
        """Return the UTC time of a moment in s from the first frame; None without a start time."""
        if self.start_time is None or not np.isfinite(time_s):
            return None
        return self.start_time + timedelta(seconds=float(time_s))

    def blocks(self, block_s: float = 60.0, *, overlap_s: float = 0.0) -> Iterator[AudioBlock]:
        """Yield consecutive blocks of the measured channel; the last may be shorter.

        Parameters
        ----------
        block_s : float
            Length of a block, s.
        overlap_s : float
            How much of a block comes again at the beginning of the next, s; below `block_s`.

        Raises
        ------
        RecordingError
            When the file is no longer what it was when it was opened.
        """
        length = max(1, round(block_s * self.sample_rate_hz))
        advance = max(1, length - round(overlap_s * self.sample_rate_hz))
        held = np.empty(0, np.float32)
        first = 0
        for samples in self._samples():
            held = np.concatenate([held, samples])
            while len(held) >= length:
                yield self._block(first, held[:length])
                held = held[advance:]
                first += advance
        fresh_from = length - advance if first else 0  # frames already delivered
        if len(held) > fresh_from:
            yield self._block(first, held)
        if first + len(held) != self.frame_count:
            raise RecordingError(
                Notice("E109", self.path, "changed while it was read", "run again when it is still")
            )

    def _samples(self) -> Iterator[NDArray[np.float32]]:
        live = np.ones(self.channels, bool)
        live[[channel - 1 for channel in self.dead_channels]] = False
        with AudioFile(self.path) as audio:
            for piece in audio.pieces():
                yield mix(piece, channel=self.channel, live=live)

    def _block(self, first: int, samples: NDArray[np.float32]) -> AudioBlock:
        usable = np.isfinite(samples)
        for start, end in self.unusable_frames:
            usable[max(0, start - first) : max(0, end - first)] = False
        samples = np.where(usable, samples, np.float32(0))
        return AudioBlock(first, samples, usable, self.sample_rate_hz)


def open_recording(
    path: str | os.PathLike[str],
    *,
    station: Station | None = None,
    start: datetime | None = None,
    channel: int | str = 1,
) -> Recording:
    """Return a recording after one quick pass over it, with everything found wrong in it.

    Parameters
    ----------
    path : str or path-like
        WAV, RF64, FLAC, OGG, AIFF, W64, CAF, AU or MP3, told by content.
    station : Station, optional
        Gives the file name pattern, the clock offset and the names of channels.
    start : datetime, optional
        Time of the first frame, UTC; overrides every other rule.
    channel : int, str
        Channel to measure: its number from 1, its name in the station file, or ``"mean"``.

    Returns
    -------
    Recording

    Raises
    ------
    RecordingError
        When nothing in the file can be measured, or it has no such channel.
    """
    path = os.fspath(path)
    with AudioFile(path) as audio:
        chosen = _channel(channel, channels=audio.channels, station=station, path=path)
        surveyor = Surveyor(
            channels=audio.channels,
            channel=chosen,
            sample_rate_hz=audio.sample_rate_hz,
            subtype=audio.subtype,
        )
        for piece in audio.pieces():
            surveyor.add(piece)
        survey = _without_lost(surveyor.result(), audio.lost_frames)
        _check_length(path, survey.frame_count / audio.sample_rate_hz)
        begin = start_time(
            path,
            given=start,
            station=station,
            broadcast=audio.broadcast,
            sample_rate_hz=audio.sample_rate_hz,
        )
        return Recording(
            path=path,
            sample_rate_hz=audio.sample_rate_hz,
            frame_count=survey.frame_count,
            channels=audio.channels,
            channel=chosen,
            start_time=begin.time,
            start_time_source=begin.source,
            notices=tuple(_notices(audio, survey, chosen=chosen, begin=begin)),
            container=audio.container,
            digest_sha256=_digest(audio.descriptor),
            dead_channels=tuple(int(index) + 1 for index in np.flatnonzero(survey.dead)),
            unusable_frames=tuple(sorted([*audio.lost_frames, *survey.silent_frames])),
        )


def peek_start(path: str, *, station: Station | None = None) -> datetime | None:
    """Return when a recording began without reading its samples; None when it cannot be told."""
    try:
        with AudioFile(path) as audio:
            broadcast, rate = audio.broadcast, audio.sample_rate_hz
    except RecordingError:
        return None
    return start_time(path, station=station, broadcast=broadcast, sample_rate_hz=rate).time


def _channel(channel: int | str, *, channels: int, station: Station | None, path: str) -> int | str:
    """Return the channel as a number from 1 or ``"mean"``, after checking that it exists."""
    names = station.channel_names if station else ()
    if channel in names:
        channel = names.index(str(channel)) + 1
    if channel == "mean" or (isinstance(channel, int) and 1 <= channel <= channels):
        return channel
    known = ", ".join([*names, *(str(number + 1) for number in range(min(channels, 8))), "mean"])
    raise RecordingError(
        Notice("E114", path, f"channel={channel} is not among {known}", "choose one of those")
    )


def _without_lost(survey: Survey, lost_frames: list[tuple[int, int]]) -> Survey:
    """Return the survey without the silence that stands in for what could not be decoded."""
    silent = tuple(
        (start, end)
        for start, end in survey.silent_frames
        if not any(start < last and first < end for first, last in lost_frames)
    )
    return replace(survey, silent_frames=silent)


def _check_length(path: str, duration_s: float) -> None:
    if duration_s < SHORTEST_S:
        reason = f"too short: {duration_s:.3f} s of audio, at least {SHORTEST_S:g} s is needed"
        raise RecordingError(Notice("E107", path, reason, "skipped"))


def _digest(descriptor: int) -> str:
    digest = hashlib.sha256()
    offset = 0
    while data := os.pread(descriptor, 2**20, offset):
        digest.update(data)
        offset += len(data)
    return digest.hexdigest()


def _notices(
    audio: AudioFile, survey: Survey, *, chosen: int | str, begin: StartTime
) -> Iterator[Notice]:
    """Yield everything to be told about file and samples."""
    yield from audio.notices
    used = slice(None) if chosen == "mean" else slice(int(chosen) - 1, int(chosen))
    total = survey.frame_count * len(survey.nonfinite[used])
    nonfinite, clipped = int(survey.nonfinite[used].sum()), int(survey.clipped[used].sum())
    if nonfinite:
        reason = f"{nonfinite} of {total} samples are not finite numbers"
        yield Notice("W201", audio.path, reason, "left out")
    if clipped:
        percent = 100 * clipped / total
        shown = f"{percent:.2g}" if percent < 10 else f"{percent:.0f}"
        reason = f"{shown} % of the samples are clipped at full scale"
        yield Notice("W202", audio.path, reason, "amplitudes and weak traces suffer")
    silent = sum(last - first for first, last in survey.silent_frames) / audio.sample_rate_hz
    if silent:
        longest = max(survey.silent_frames, key=lambda span: span[1] - span[0])
        first, last = (frame / audio.sample_rate_hz for frame in longest)
        reason = f"{silent:.2f} s silent (one constant value), longest {first:.2f}-{last:.2f} s"
        yield Notice("W206", audio.path, reason, "left out, not counted as live time")
    yield from _dead_channel_notices(audio, survey, chosen=chosen)
    if begin.time is None:
        reason = "nothing tells when it began"
        step = "times are relative, the field of 2025.0 is used; give --start to date them"
        yield Notice("N301", audio.path, reason, step)


def _dead_channel_notices(
    audio: AudioFile, survey: Survey, *, chosen: int | str
) -> Iterator[Notice]:
    if audio.channels == 1:
        return
    for number in np.flatnonzero(survey.dead) + 1:
        reason = f"channel {number} of {audio.channels} is dead (one constant value)"
        if chosen == number:
            consequence = "measure another one with --channel"
        elif chosen == "mean":
            consequence = "left out of the mean"
        else:
            consequence = f"channel {chosen} is measured"
        yield Notice("W207", audio.path, reason, consequence)
