"""What share of whistlers is found in somebody's recordings: plan, inject, search, match."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from pathlib import Path

import numpy as np

from fieldlines.errors import FieldlinesError
from whistler.errors import Notice, RecordingError, UsageError, WhistlerError
from whistler.injection import InjectedAudio, Surroundings, backwards, inject, surroundings
from whistler.night import find_recordings
from whistler.pieces import Piece, PiecePlan, plan_pieces, usable_s
from whistler.recording import Recording, open_recording
from whistler.recovery import Injection, Tally, match
from whistler.savefile import fault_notice
from whistler.settings import Settings

MOST_EMPTY = 3  # searches of a piece in a row into which no whistler fitted
LIMITS: dict[str, tuple[int, int]] = {"injections": (1, 100_000), "seed": (0, 2**63 - 1)}
SNR_LIMITS_DB = (-20.0, 40.0)

Tell = Callable[[Notice], None]
Progress = Callable[[float, float], None]


@dataclass(frozen=True)
class Request:
    """What to inject.

    Parameters
    ----------
    injections : int
        Number of whistlers, over all recordings.
    seed : int
        Seed of everything random.
    l_range, snr_range_db : tuple of float
        Ranges of L and of strength in dB, drawn from uniformly.
    """

    injections: int = 500
    seed: int = 1
    l_range: tuple[float, float] = (2.2, 4.6)
    snr_range_db: tuple[float, float] = (-3.0, 12.0)

    def __post_init__(self) -> None:
        """Check the ranges."""
        for name, (least, most) in LIMITS.items():
            if not least <= getattr(self, name) <= most:
                _refuse(name, f"{getattr(self, name)} is outside {least} to {most}")
        low, high = self.snr_range_db
        if not SNR_LIMITS_DB[0] <= low < high <= SNR_LIMITS_DB[1]:
            _refuse("snr-range", f"{low:g} to {high:g} is no increasing pair within -20 to 40")

    def check_l(self, settings: Settings) -> None:
        """Refuse an L range that is not searched.

        Raises
        ------
        UsageError
            When it is no increasing pair within the settings' own.
        """
        low, high = self.l_range
        first, last = settings.l_range
        if not first <= low < high <= last:
            within = f"{first:g} to {last:g}, what is searched"
            _refuse("l-range", f"{low:g} to {high:g} is no increasing pair within {within}")


@dataclass(frozen=True)
class Completeness:
    """Everything that was injected and seen.

    Parameters
    ----------
    settings : Settings
        Of the search.
    request : Request
        What was asked for.
    recordings : tuple of Recording
        Those used or kept ready, in time order.
    refused : tuple of Notice
        Why others could not be used.
    injections : tuple of Injection
        In the order of the recordings.
    tally : Tally
        What else was seen.
    """

    settings: Settings
    request: Request
    recordings: tuple[Recording, ...]
    refused: tuple[Notice, ...]
    injections: tuple[Injection, ...]
    tally: Tally


@dataclass
class _Done:
    """What has been done so far, and who is told."""

    progress: Progress
    total_s: float
    done_s: float = 0.0
    injections: list[Injection] = field(default_factory=list)
    tally: Tally = field(default_factory=Tally)

    def searched(self, duration_s: float) -> None:
        self.done_s = min(self.done_s + duration_s, self.total_s)
        self.progress(self.done_s, self.total_s)


def measure_completeness(
    folder: Path,
    *,
    settings: Settings,
    request: Request,
    start: datetime | None = None,
    tell: Tell = lambda notice: None,
    progress: Progress = lambda done, total: None,
) -> Completeness:
    """Return what the search finds of whistlers injected into copies of a folder's audio.

    Parameters
    ----------
    folder : Path
        Searched for recordings, folders within it too; only ever read.
    settings : Settings
        What to search with.
    request : Request
        What to inject.
    start : datetime, optional
        Time of the first frame of the only recording, UTC.
    tell : callable
        Gets every notice as it comes up.
    progress : callable
        Gets how many seconds of audio of how many have been searched.

    Returns
    -------
    Completeness
        The same for the same files, settings and request.

    Raises
    ------
    UsageError
        When the request does not suit the settings, or one start time is for many recordings.
    RecordingError
        When no recording can be used.
    """
    request.check_l(settings)
    recordings, refused = _open_all(folder, settings=settings, start=start, tell=tell)
    plan = plan_pieces([recording.frame_count for recording in recordings],
                       rates_hz=[recording.sample_rate_hz for recording in recordings],
                       injections=request.injections)  # fmt: skip
    done = _Done(progress, sum(piece.duration_s * piece.searches for piece in plan))
    progress(0.0, done.total_s)
    for number, recording in enumerate(recordings):
        own = [piece for piece in plan if piece.recording == number]
        try:
            _use_recording(recording, own, settings=settings, request=request, done=done)
        except WhistlerError as error:
            refused.append(error.notice)
            tell(error.notice)
        except FieldlinesError as error:
            reason, _, step = str(error).partition("; ")
            refused.append(Notice("E301", recording.path, reason, step))
            tell(refused[-1])
        except Exception as error:  # whatever is wrong with this file, the others are still used
            refused.append(fault_notice(recording.path, error))
            tell(refused[-1])
    if recordings:
        _tell_missing(folder, len(done.injections), request.injections, tell)
    used = tuple(recordings)
    return Completeness(settings, request, used, tuple(refused), tuple(done.injections), done.tally)


def _tell_missing(folder: Path, injected: int, wanted: int, tell: Tell) -> None:
    """Say when fewer whistlers were injected than asked for; none at all is an error."""
    if injected == 0:
        reason = f"none of {wanted} whistlers could be injected: silent, too short or unusable"
        tell(Notice("E208", str(folder), reason, "name a folder of longer recordings with noise"))
    elif injected < wanted:
        reason = f"{wanted - injected} of {wanted} whistlers could not be injected"
        tell(Notice("W208", str(folder), reason, "the others count; longer recordings take more"))


def _open_all(
    folder: Path, *, settings: Settings, start: datetime | None, tell: Tell
) -> tuple[list[Recording], list[Notice]]:
    """Open every recording of a folder; what cannot be is told and left out."""
    paths = find_recordings(folder, settings=settings, out=folder)
    if start is not None and len(paths) > 1:
        reason = f"one start time for {len(paths)} recordings"
        raise UsageError(
            Notice("E605", "--start", reason, "leave it out, or name the folder of one")
        )
    opened, refused = [], []
    for path in paths:
        try:
            recording = open_recording(
                path, station=settings.station, start=start, channel=settings.channel
            )
        except WhistlerError as error:
            refused.append(error.notice)
            tell(error.notice)
            continue
        for notice in dict.fromkeys(recording.notices):
            tell(notice)
        opened.append(recording)
    if not paths:
        reason = "no recordings in this folder or below"
        raise RecordingError(Notice("E115", str(folder), reason, "name another folder"))
    return opened, refused


def _use_recording(
    recording: Recording,
    plan: Sequence[PiecePlan],
    *,
    settings: Settings,
    request: Request,
    done: _Done,
) -> None:
    """Go through the pieces of a recording that are used; the others are only read over."""
    if not plan:
        return
    wanted = {piece.piece: piece for piece in plan}
    length_s = plan[0].frame_count / recording.sample_rate_hz
    for number, block in enumerate(recording.blocks(length_s)):
        if number in wanted:
            piece = Piece.of(recording, block)
            start_s = block.first_frame / block.sample_rate_hz
            _use_piece(piece, start_s, wanted[number], settings, request, done)


def _use_piece(
    piece: Piece,
    start_s: float,
    plan: PiecePlan,
    settings: Settings,
    request: Request,
    done: _Done,
) -> None:
    """Search a piece as it is, backwards, and with whistlers until its quota is reached."""
    block = piece.audio
    if block is None:
        return
    own = piece.rows(settings)
    done.searched(plan.duration_s)
    traces = [row.trace for row in own]
    turned = backwards(block, traces)
    false_rows = replace(piece, audio=turned).rows(settings)
    done.searched(plan.duration_s)
    done.tally += Tally(
        live_s=usable_s(block),
        rows=len(own),
        reversed_s=usable_s(turned),
        false_rows=len(false_rows),
    )
    around = surroundings(block, piece, traces=traces, settings=settings)
    generator = np.random.default_rng([request.seed, plan.stream])
    left, empty = plan.quota, 0
    while left > 0 and empty < MOST_EMPTY:
        audio = inject(
            around,
            generator,
            count=min(left, plan.at_once),
            l_range=request.l_range,
            snr_range_db=request.snr_range_db,
            settings=settings,
        )
        done.tally += Tally(rejected=audio.rejected)
        left -= len(audio.whistlers)
        empty = 0 if audio.whistlers else empty + 1
        if audio.whistlers:
            _search_injected(piece, start_s, audio, around, settings, done)
            done.searched(plan.duration_s)


def _search_injected(
    piece: Piece,
    start_s: float,
    audio: InjectedAudio,
    around: Surroundings,
    settings: Settings,
    done: _Done,
) -> None:
    """Search a piece with whistlers in it and give every row to whom it belongs."""
    rows = replace(piece, audio=audio.block).rows(settings)
    traces = [row.trace for row in rows]
    partner = match([truth.trace for truth in audio.whistlers], traces)
    for number, (truth, diffuse) in enumerate(zip(audio.whistlers, audio.diffuse, strict=True)):
        done.injections.append(
            Injection(
                recording=piece.path,
                start_s=start_s,
                time=piece.time_at(truth.lightning_time_s),
                truth=truth,
                diffuse=diffuse,
                row=rows[partner[number]] if number in partner else None,
            )
        )
    others = [trace for k, trace in enumerate(traces) if k not in set(partner.values())]
    known = match(around.traces, others)
    done.tally += Tally(injected_s=usable_s(audio.block), extra_rows=len(others) - len(known))


def _refuse(name: str, why: str) -> None:
    raise UsageError(Notice("E601", f"--{name}", why, "choose a value in that range"))
