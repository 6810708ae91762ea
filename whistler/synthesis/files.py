"""Synthetic recordings as files: 16-bit FLAC beside the truth as JSON."""

from __future__ import annotations

import io
import json
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import soundfile

from whistler.errors import Notice, OutputError, UsageError
from whistler.savefile import prepare_folder, write_whole
from whistler.synthesis.render import SyntheticRecording, render
from whistler.synthesis.scene import Scene
from whistler.synthesis.truth import TRUTH_SCHEMA


@dataclass(frozen=True)
class WrittenRecording:
    """Where a synthetic recording lies.

    Parameters
    ----------
    audio_path, truth_path : pathlib.Path
        The files.
    recording : SyntheticRecording
        What they hold.
    """

    audio_path: Path
    truth_path: Path
    recording: SyntheticRecording


def flac_bytes(recording: SyntheticRecording) -> bytes:
    """Return a recording as a 16-bit FLAC file.

    Parameters
    ----------
    recording : SyntheticRecording
        With finite samples.

    Returns
    -------
    bytes
        The file; it carries no date, so the same recording gives the same bytes.

    Raises
    ------
    UsageError
        When samples are not numbers, which FLAC cannot hold.
    """
    if not np.isfinite(recording.samples).all():
        name = recording.truth.scene["name"]
        reason = "the scene has dropouts (NaN), which a FLAC file cannot hold"
        raise UsageError(Notice("E612", name, reason, "leave out receiver.dropouts"))
    whole = (recording.samples.astype(np.float64) * 2**15).round().astype(np.int16)
    buffer = io.BytesIO()
    soundfile.write(
        buffer, whole, recording.sample_rate_hz,
        format="FLAC", subtype="PCM_16", compression_level=1.0,
    )  # fmt: skip
    return buffer.getvalue()


def write_recordings(
    scenes: Sequence[Scene], folder: Path, *, overwrite: bool = False
) -> list[WrittenRecording]:
    """Return the recordings of scenes after writing them into a folder.

    Parameters
    ----------
    scenes : sequence of Scene
        With names that differ.
    folder : pathlib.Path
        Where NAME.flac and NAME.truth.json go; made when missing.
    overwrite : bool
        Replace files that hold something else.

    Returns
    -------
    list of WrittenRecording
        In order.

    Raises
    ------
    UsageError
        When two scenes have one name.
    OutputError
        When the folder cannot be written, or a file there holds something else.
    """
    names = [scene.name for scene in scenes]
    for name in names:
        if names.count(name) > 1:
            reason = f"{names.count(name)} scenes are called so"
            raise UsageError(Notice("E613", name, reason, "rename all but one"))
    prepare_folder(folder)
    return [_write(scene, folder, overwrite=overwrite) for scene in scenes]


def _write(scene: Scene, folder: Path, *, overwrite: bool) -> WrittenRecording:
    recording = render(scene)
    contents = {
        folder / f"{scene.name}.flac": flac_bytes(recording),
        folder / f"{scene.name}.truth.json": recording.truth.to_json().encode(),
    }
    for path, content in contents.items():
        if not overwrite and path.exists() and path.read_bytes() != content:
            reason = "exists and holds something else"
            raise OutputError(
                Notice("E404", str(path), reason, "use --overwrite or another --out folder")
            )
    for path, content in contents.items():
        write_whole(path, content)
    audio_path, truth_path = contents
    return WrittenRecording(audio_path, truth_path, recording)


def truth_document(written: Sequence[WrittenRecording]) -> str:
    """Return the truth of recordings as one JSON document.

    Parameters
    ----------
    written : sequence of WrittenRecording
        At least one.

    Returns
    -------
    str
        The truth itself for one recording, else an object with the list `recordings`.
    """
    if len(written) == 1:
        return written[0].recording.truth.to_json()
    truths = [one.recording.truth.to_dict() for one in written]
    document = {"schema": TRUTH_SCHEMA, "recordings": truths}
    return json.dumps(document, indent=1, allow_nan=False) + "\n"


def summary(written: Sequence[WrittenRecording]) -> str:
    """Return one line for each recording written.

    Parameters
    ----------
    written : sequence of WrittenRecording
        The recordings.

    Returns
    -------
    str
        File, length, number of whistlers and what it shows.
    """
    lines = []
    for one in written:
        truth = one.recording.truth
        count = f"{len(truth.whistlers)} whistler traces"
        parts = [f"{one.audio_path}: {truth.duration_s:g} s", count, truth.scene["shows"]]
        lines.append(", ".join(part for part in parts if part) + "\n")
    return "".join(lines)
