"""One quick pass over the samples before the analysis: what in them cannot be trusted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

SILENT_S = 0.1  # a receiver's noise never stays at one value that long
FULL_SCALE = {"PCM_U8": 0.99, "PCM_S8": 0.99, "ULAW": 0.98, "ALAW": 0.98}
FULL_SCALE_OTHERWISE = 0.9999  # 32 767 of 32 768 and above


@dataclass(frozen=True)
class Survey:
    """What the samples of one recording look like.

    Parameters
    ----------
    frame_count : int
        Frames delivered.
    nonfinite : ndarray of int, shape (channels,)
        Samples that are not numbers or infinite.
    clipped : ndarray of int, shape (channels,)
        Samples at full scale that repeat the one before: flat tops.
    dead : ndarray of bool, shape (channels,)
        Channels that hold one value from beginning to end.
    silent_frames : tuple of (int, int)
        Stretches (first, past the last) in which the measured channel holds one value.
    """

    frame_count: int
    nonfinite: NDArray[np.int64]
    clipped: NDArray[np.int64]
    dead: NDArray[np.bool_]
    silent_frames: tuple[tuple[int, int], ...]


class Surveyor:
    """Gathers a :class:`Survey` from consecutive pieces.

    Parameters
    ----------
    channels : int
        Channels in every piece.
    channel : int or "mean"
        Channel to measure, counted from 1, or their average.
    sample_rate_hz : int
        Frames per second, Hz.
    subtype : str
        Sample format, for the value of full scale.
    """

    def __init__(
        self, *, channels: int, channel: int | str, sample_rate_hz: int, subtype: str
    ) -> None:
        self._channel = channel
        self._full_scale = FULL_SCALE.get(subtype, FULL_SCALE_OTHERWISE)
        self._shortest = max(2, round(SILENT_S * sample_rate_hz))
        self._frames = 0
        self._nonfinite = np.zeros(channels, np.int64)
        self._clipped = np.zeros(channels, np.int64)
        self._last_frame = np.zeros((1, channels), np.float32)
        self._low = np.full(channels, np.inf)
        self._high = np.full(channels, -np.inf)
        self._last = np.float32(np.nan)
        self._run_start = 0
        self._silent: list[tuple[int, int]] = []

    def add(self, piece: NDArray[np.float32]) -> None:
        """Take in the next piece, shape (frames, channels)."""
        finite = np.isfinite(piece)
        if not finite.all():
            self._nonfinite += (~finite).sum(axis=0)
            piece = np.where(finite, piece, np.float32(0))
        self._low = np.minimum(self._low, piece.min(axis=0))
        self._high = np.maximum(self._high, piece.max(axis=0))
        self._count_clipped(piece)
        self._find_silence(mix(piece, channel=self._channel))
        self._last_frame = piece[-1:]
        self._frames += len(piece)

    def result(self) -> Survey:
        """Return the survey of everything added."""
        self._end_run(self._frames)
        return Survey(
            frame_count=self._frames,
            nonfinite=self._nonfinite,
            clipped=self._clipped,
            dead=self._low >= self._high,
            silent_frames=tuple(self._silent),
        )

    def _count_clipped(self, piece: NDArray[np.float32]) -> None:
        if max(self._high.max(), -self._low.min()) < self._full_scale:
            return  # nothing has reached full scale yet
        both = np.concatenate([self._last_frame, piece])
        flat = (both[1:] == both[:-1]) & (np.abs(piece) >= self._full_scale)
        self._clipped += flat.sum(axis=0)

    def _find_silence(self, samples: NDArray[np.float32]) -> None:
        """Close runs of one value at every change of value."""
        before = np.concatenate([[self._last], samples[:-1]])
        changes = np.flatnonzero(samples != before) + self._frames
        starts = np.concatenate([[self._run_start], changes])
        for index in np.flatnonzero(np.diff(starts) >= self._shortest):
            self._silent.append((int(starts[index]), int(starts[index + 1])))
        self._run_start = int(starts[-1])
        self._last = samples[-1]

    def _end_run(self, end: int) -> None:
        if end - self._run_start >= self._shortest:
            self._silent.append((self._run_start, end))


def mix(
    piece: NDArray[np.float32], *, channel: int | str, live: NDArray[np.bool_] | None = None
) -> NDArray[np.float32]:
    """Return one channel of a piece, or the mean of its live channels.

    Parameters
    ----------
    piece : ndarray, shape (frames, channels)
        Audio.
    channel : int or "mean"
        Channel counted from 1, or the average.
    live : ndarray of bool, shape (channels,), optional
        Channels that count for the average; all by default.

    Returns
    -------
    ndarray, shape (frames,)

    Examples
    --------
    >>> mix(np.array([[1.0, 3.0]], np.float32), channel="mean").tolist()
    [2.0]
    """
    if isinstance(channel, int):
        return piece[:, channel - 1]
    chosen = piece if live is None or not live.any() else piece[:, live]
    mean: NDArray[np.float32] = chosen.mean(axis=1, dtype=np.float32)
    return mean
