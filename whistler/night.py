"""Many recordings one after another, each result saved as it is done, and one catalogue of them."""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from datetime import datetime
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from fieldlines.errors import FieldlinesError
from whistler import __version__
from whistler.catalogue import CATALOGUE_FILES, Entry, entry, json_text, write_catalogue
from whistler.containers import ENDINGS
from whistler.errors import BusyError, Notice, OutputError, RecordingError, Stopped, WhistlerError
from whistler.recording import open_recording, peek_start
from whistler.savefile import fault_notice, prepare_folder, unwritable, write_whole
from whistler.settings import Settings

if TYPE_CHECKING:
    from whistler.measure import Measurement

WORK = ".work"
Tell = Callable[[Notice], None]


@dataclass(frozen=True)
class Outcome:
    """What became of one recording: a measurement, or the reason why there is none.

    Parameters
    ----------
    path : str
        As given.
    measurement : Measurement or None
        The result.
    refusal : Notice or None
        Why there is none.
    """

    path: str
    measurement: Measurement | None = None
    refusal: Notice | None = None

    @property
    def notices(self) -> tuple[Notice, ...]:
        """Everything to be told about this recording, each once."""
        if self.refusal is not None:
            return (self.refusal,)
        if self.measurement is None:
            return ()
        told = [*self.measurement.recording.notices, *self.measurement.notices]
        return tuple(dict.fromkeys(told))


@dataclass(frozen=True)
class NightResult:
    """What became of a folder.

    Parameters
    ----------
    entries : tuple of Entry
        Measured recordings in time order.
    refused : tuple of Notice
        Why the others could not be.
    measured : int
        How many of all were measured in this run rather than found saved.
    """

    entries: tuple[Entry, ...]
    refused: tuple[Notice, ...]
    measured: int


def measure_one(
    path: str,
    settings: Settings,
    *,
    start: datetime | None = None,
    progress: Callable[[float], None] | None = None,
) -> Outcome:
    """Return the outcome of measuring one recording; no fault of one file stops the others.

    Parameters
    ----------
    path : str
        Recording.
    settings : Settings
        What to measure with.
    start : datetime, optional
        Time of its first frame, UTC.
    progress : callable, optional
        Called with the share done, 0 to 1.

    Returns
    -------
    Outcome
    """
    try:
        recording = open_recording(
            path, station=settings.station, start=start, channel=settings.channel
        )
        from whistler.measure import measure_recording  # slow to import: only for a usable file

        measurement = measure_recording(recording, settings, progress=progress)
        return Outcome(path, measurement=measurement)
    except OutputError:
        raise
    except WhistlerError as error:
        return Outcome(path, refusal=error.notice)
    except FieldlinesError as error:
        reason, _, step = str(error).partition("; ")
        return Outcome(path, refusal=Notice("E301", path, reason, step))
    except Exception as error:  # whatever is wrong with this file, the others are still measured
        return Outcome(path, refusal=fault_notice(path, error))


def measure_night(
    folder: Path,
    out: Path,
    *,
    settings: Settings,
    overwrite: bool = False,
    tell: Tell = lambda notice: None,
    progress: Callable[[float, float], None] = lambda done, total: None,
) -> NightResult:
    """Return what became of a folder of recordings, and leave their catalogue in `out`.

    Parameters
    ----------
    folder : Path
        Searched for recordings, folders within it too.
    out : Path
        Gets the catalogue; what is measured already is not measured again.
    settings : Settings
        What to measure with. Recordings saved under other settings are measured again.
    overwrite : bool
        Whether a catalogue that is not of a night may be replaced.
    tell : callable
        Gets every notice as it comes up.
    progress : callable
        Gets how many of how many recordings are done.

    Returns
    -------
    NightResult

    Raises
    ------
    OutputError, BusyError
        When `out` cannot be written, belongs to something else, or is in use.
    RecordingError
        When the folder holds no recordings.
    """
    _claim(out, overwrite=overwrite)
    with _lock(out):
        paths = find_recordings(folder, settings=settings, out=out)
        if not paths:
            reason = "no recordings in this folder or below"
            raise RecordingError(Notice("E115", str(folder), reason, "name another folder"))
        done: list[tuple[Entry | None, Notice | None]] = []
        measured = 0
        try:
            for path in paths:
                progress(len(done), len(paths))
                saved = _load(out, path, settings, tell=tell)
                measured += saved is None
                share = partial(_share_done, progress, len(done), len(paths))
                done.append(
                    saved or _measure_and_save(out, path, settings, tell=tell, progress=share)
                )
            progress(len(done), len(paths))
        except Stopped as stop:
            reason = f"stopped with {len(done)} of {len(paths)} recordings done"
            notice = Notice("N401", str(out), reason, "run the same command again to go on")
            raise Stopped(stop.signal_number, notice) from stop
        finally:
            entries = tuple(item for item, _ in done if item is not None)
            refused = tuple(notice for _, notice in done if notice is not None)
            write_catalogue(out, entries, settings=settings, refused=refused)
    return NightResult(entries, refused, measured)


def _share_done(
    progress: Callable[[float, float], None], done: int, total: int, share: float
) -> None:
    progress(done + share, total)


def _claim(out: Path, *, overwrite: bool) -> None:
    """Make the output folder ready; refuse one whose catalogue did not come from a night."""
    prepare_folder(out)
    foreign = [name for name in CATALOGUE_FILES if (out / name).exists()]
    if foreign and not (out / WORK).exists() and not overwrite:
        reason = f"holds {foreign[0]}, which no night run wrote"
        notice = Notice("E402", str(out), reason, "choose another folder or give --overwrite")
        raise OutputError(notice)
    prepare_folder(out / WORK)


def find_recordings(folder: Path, *, settings: Settings, out: Path) -> list[str]:
    """Return the recordings below a folder in time order, those without a time last.

    Parameters
    ----------
    folder : Path
        Where to look; links to folders are not followed.
    settings : Settings
        Its station tells the times.
    out : Path
        Folder of results, left out when it lies within.
    """
    endings = {ending for group in ENDINGS.values() for ending in group}
    found: list[tuple[bool, str, str]] = []
    for place, folders, names in os.walk(folder):
        folders[:] = [
            name
            for name in folders
            if not name.startswith(".") and (Path(place) / name).resolve() != out.resolve()
        ]
        for name in names:
            if not name.startswith(".") and Path(name).suffix.lower() in endings:
                path = os.fspath(Path(place) / name)
                began = peek_start(path, station=settings.station)
                found.append((began is None, began.isoformat() if began else "", path))
    return [path for _, _, path in sorted(found)]


def _measure_and_save(
    out: Path,
    path: str,
    settings: Settings,
    *,
    tell: Tell,
    progress: Callable[[float], None],
) -> tuple[Entry | None, Notice | None]:
    """Return entry or refusal of one recording after saving it."""
    key = _key(path, settings)
    outcome = measure_one(path, settings, progress=progress)
    item = entry(outcome.measurement) if outcome.measurement is not None else None
    for notice in outcome.notices:
        tell(notice)
    saved = {
        "key": key,
        "entry": asdict(item) if item else None,
        "refusal": asdict(outcome.refusal) if outcome.refusal else None,
    }
    internal = outcome.refusal is not None and outcome.refusal.code == "E701"
    if not internal:  # a fault of this program is tried again the next time
        write_whole(_saved_path(out, path), json_text(saved).encode("ascii"))
    return item, outcome.refusal


def _load(
    out: Path, path: str, settings: Settings, *, tell: Tell
) -> tuple[Entry | None, Notice | None] | None:
    """Return what an earlier run saved of a recording, or None when it must be measured."""
    place = _saved_path(out, path)
    if not place.exists():
        return None
    try:
        saved = json.loads(place.read_bytes())
        key, kept, refusal = saved["key"], saved["entry"], saved["refusal"]
        item = (
            Entry(kept["recording"], tuple(kept["whistlers"]), kept["provenance"]) if kept else None
        )
        notice = Notice(**refusal) if refusal else None
    except (OSError, ValueError, KeyError, TypeError) as error:
        reason = f"saved result cannot be used ({type(error).__name__})"
        tell(Notice("W501", path, reason, "measured again"))
        return None
    if key != _key(path, settings):
        tell(Notice("N501", path, "settings, program or file changed", "measured again"))
        return None
    return item, notice


def _key(path: str, settings: Settings) -> dict[str, Any]:
    """Return what must be unchanged for a saved result to count."""
    try:
        status = Path(path).stat()
        size, changed = status.st_size, status.st_mtime_ns
    except OSError:
        size, changed = -1, -1
    settings_plain = json.loads(json_text(settings.to_dict()))
    return {
        "path": path,
        "size": size,
        "mtime_ns": changed,
        "version": __version__,
        "settings": settings_plain,
    }


def _saved_path(out: Path, path: str) -> Path:
    digest = hashlib.sha256(os.fsencode(path)).hexdigest()
    return out / WORK / f"{digest[:24]}.json"


@contextmanager
def _lock(out: Path) -> Iterator[None]:
    """Hold the output folder; the system lets go of it when the process ends, however it ends."""
    place = out / WORK / "lock"
    try:
        descriptor = os.open(place, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
    except OSError as error:
        raise unwritable(place, error) from error
    try:
        try:
            fcntl.lockf(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            notice = Notice("E403", str(out), "in use by another run", "wait for it to end")
            raise BusyError(notice) from error
        yield
    finally:
        os.close(descriptor)
