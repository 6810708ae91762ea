"""Stretches of recordings, each searched as a whole: which are used, and how one is searched."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, replace

import numpy as np

from whistler.recording import AudioBlock, Recording
from whistler.rows import WhistlerRow
from whistler.settings import Settings

PIECE_S = 160.0  # searched as a whole, like the blocks of a long recording
WHISTLER_EVERY_S = 8.0  # where there is enough audio
LEAST_EACH_S = 5.0  # audio for each whistler of one search, or it would be a crowd
LOST_S = 4.0  # at the end of a piece, where a whistler no longer fits


@dataclass(frozen=True)
class Piece(Recording):
    """A stretch of a recording as a recording of its own, held in memory.

    Parameters
    ----------
    audio : AudioBlock or None
        Its samples, the first at time zero.
    """

    audio: AudioBlock | None = None

    @classmethod
    def of(cls, recording: Recording, block: AudioBlock) -> Piece:
        """Return a block of a recording, dated."""
        known = {item.name: getattr(recording, item.name) for item in fields(Recording)}
        start = recording.time_at(block.first_frame / block.sample_rate_hz)
        known |= {"frame_count": len(block.samples), "start_time": start}
        known["unusable_frames"] = ()  # the block knows
        return cls(**known, audio=replace(block, first_frame=0))

    def blocks(self, block_s: float = 60.0, *, overlap_s: float = 0.0) -> Iterator[AudioBlock]:
        """Yield the piece, whatever length is asked for: it is no longer than a block."""
        if self.audio is not None:
            yield self.audio

    def rows(self, settings: Settings) -> tuple[WhistlerRow, ...]:
        """Return what the ordinary search finds in it."""
        from whistler.measure import measure_recording  # slow to import

        return measure_recording(self, settings).rows


@dataclass(frozen=True)
class PiecePlan:
    """A stretch of a recording that will be used.

    Parameters
    ----------
    recording : int
        Number of the recording.
    piece : int
        Number of the stretch in the recording.
    frame_count : int
        Frames of every stretch of the recording but the last, which may have a few less.
    duration_s : float
        Its length, s.
    quota : int
        Whistlers to put into it.
    stream : int
        Number of its stream of random numbers.
    """

    recording: int
    piece: int
    frame_count: int
    duration_s: float
    quota: int = 0
    stream: int = 0

    @property
    def searches(self) -> int:
        """How many searches the piece will take, about: as it is, backwards, with whistlers."""
        return 2 + -(-self.quota // self.at_once)

    @property
    def at_once(self) -> int:
        """How many whistlers one search of it can hold without a crowd."""
        return max(1, int(self.duration_s / LEAST_EACH_S))


def plan_pieces(
    frame_counts: Sequence[int], *, rates_hz: Sequence[int], injections: int
) -> tuple[PiecePlan, ...]:
    """Return which stretches of which recordings are used, and how many whistlers each gets.

    Parameters
    ----------
    frame_counts : sequence of int
        Length of each recording, frames.
    rates_hz : sequence of int
        Their sampling rates, Hz.
    injections : int
        Whistlers in all.

    Returns
    -------
    tuple of PiecePlan
        Evenly spread over all audio, one whistler in eight seconds of them; all of it, with more
        in each, when there is less. A stretch gets whistlers by the room it has.

    Examples
    --------
    >>> plan = plan_pieces([48000 * 3600] * 3, rates_hz=[48000] * 3, injections=100)
    >>> [(piece.recording, piece.piece, piece.quota) for piece in plan]
    [(0, 5, 17), (0, 17, 16), (1, 5, 17), (1, 17, 17), (2, 5, 16), (2, 17, 17)]
    """
    every: list[PiecePlan] = []
    for number, (frames, rate_hz) in enumerate(zip(frame_counts, rates_hz, strict=True)):
        count = -(-frames // int(PIECE_S * rate_hz))
        size = -(-frames // count)
        for piece in range(count):
            length_s = min(size, frames - piece * size) / rate_hz
            every.append(PiecePlan(number, piece, size, length_s, stream=len(every)))
    total_s = sum(piece.duration_s for piece in every)
    wanted = int(np.ceil(len(every) * injections * WHISTLER_EVERY_S / total_s)) if every else 0
    if len(every) > wanted:
        every = [every[int((k + 0.5) * len(every) / wanted)] for k in range(wanted)]
    room_s = np.cumsum([max(piece.duration_s - LOST_S, 0.0) for piece in every])
    share = room_s / room_s[-1] if len(every) and room_s[-1] > 0.0 else 0.0 * room_s
    upto = np.rint(injections * share).astype(int)
    quotas = np.diff(upto, prepend=0)
    return tuple(replace(p, quota=int(quota)) for p, quota in zip(every, quotas, strict=True))


def usable_s(block: AudioBlock) -> float:
    """Return how much of a block can be analysed, s."""
    return float(np.count_nonzero(block.usable)) / block.sample_rate_hz
