"""The whole of one recording: block by block to traces, then strokes, then rows."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from fieldlines import FieldLineModel
from whistler.cleaning import CleanAudio, clean
from whistler.clock import decimal_year, iso_time
from whistler.discovery import Banks, Detection, find_traces
from whistler.errors import Notice
from whistler.fit import Ties
from whistler.group import FoundTrace, group_strokes
from whistler.model import field_line_model
from whistler.recording import AudioBlock, Recording
from whistler.results import Sighting, stroke_rows
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.sferic import SfericCatalogue
from whistler.spectrogram import Spectrogram, spectrogram

BLOCK_S = 160.0
OVERLAP_S = 20.0  # a five-hop whistler with its sferic is whole in one block or the next
VIEWED_S = 600.0  # recordings up to this long keep their spectrogram for the figures

Progress = Callable[[float], None]


@dataclass(frozen=True)
class Measurement:
    """All that was measured in one recording.

    Parameters
    ----------
    recording : Recording
        The recording.
    settings : Settings
        What it was measured with.
    rows : tuple of WhistlerRow
        One for each trace, stroke by stroke in time order.
    notices : tuple of Notice
        What the user should know beyond the recording's own notices.
    views : tuple of Spectrogram
        Normalised spectrogram, block by block; empty for long recordings.
    sferics : SfericCatalogue
        All sferics seen.
    model : fieldlines.FieldLineModel
        The model of the fits.
    """

    recording: Recording
    settings: Settings
    rows: tuple[WhistlerRow, ...]
    notices: tuple[Notice, ...]
    views: tuple[Spectrogram, ...]
    sferics: SfericCatalogue
    model: FieldLineModel


@dataclass(frozen=True)
class _BlockResult:
    detections: list[Detection]
    sferics: SfericCatalogue
    view: Spectrogram


def measure_recording(
    recording: Recording, settings: Settings, *, progress: Progress | None = None
) -> Measurement:
    """Return every whistler of a recording with L, density and their error bars.

    Parameters
    ----------
    recording : Recording
        Opened recording.
    settings : Settings
        What to measure with.
    progress : callable, optional
        Called with the share done, 0 to 1.

    Returns
    -------
    Measurement
        Rows, and what a figure of them needs.
    """
    model = field_line_model(settings, decimal_year=decimal_year(recording.start_time))
    banks = _banks(_bank_model(recording, settings), settings)
    results = []
    for block in recording.blocks(BLOCK_S, overlap_s=OVERLAP_S):
        results.append(_measure_block(block, recording, banks, settings))
        if progress is not None:
            done = block.first_frame + len(block.samples)
            progress(done / max(recording.frame_count, 1))
    detections = [item for result in results for item in result.detections]
    sferics = _joined([result.sferics for result in results], recording.duration_s)
    rows = _rows(detections, sferics, recording, model, settings)
    keep = recording.duration_s <= VIEWED_S
    return Measurement(
        recording=recording,
        settings=settings,
        rows=tuple(rows),
        notices=tuple(_notices(recording)),
        views=tuple(result.view for result in results) if keep else (),
        sferics=sferics,
        model=model,
    )


def _bank_model(recording: Recording, settings: Settings) -> FieldLineModel:
    """Round the date to a year: the bank needs no more, and nights of one year share it."""
    return field_line_model(settings, decimal_year=round(decimal_year(recording.start_time)))


@lru_cache(maxsize=2)
def _banks(model: FieldLineModel, settings: Settings) -> Banks:
    return Banks(model, settings)


def _measure_block(
    block: AudioBlock, recording: Recording, banks: Banks, settings: Settings
) -> _BlockResult:
    start_s = block.first_frame / recording.sample_rate_hz
    end_s = start_s + len(block.samples) / recording.sample_rate_hz
    audio = clean(
        block.samples,
        block.usable,
        sample_rate_hz=float(recording.sample_rate_hz),
        start_s=start_s,
        settings=settings,
    )
    view = spectrogram(audio, band_low_hz=settings.band_low_hz)
    # What the overlap shows twice belongs to the block that holds more of it.
    low_s = start_s + 0.5 * OVERLAP_S if block.first_frame > 0 else -np.inf
    at_end = block.first_frame + len(block.samples) >= recording.frame_count
    high_s = np.inf if at_end else end_s - 0.5 * OVERLAP_S
    detections = [
        item
        for item in find_traces(audio, view, banks=banks, settings=settings)
        if low_s <= item.candidate.time_s < high_s
    ]
    return _BlockResult(detections, _within(audio, low_s, high_s), view)


def _within(audio: CleanAudio, low_s: float, high_s: float) -> SfericCatalogue:
    inside = (audio.sferics.time_s >= low_s) & (audio.sferics.time_s < high_s)
    return SfericCatalogue(
        audio.sferics.time_s[inside], audio.sferics.amplitude[inside], audio.sferics.duration_s
    )


def _joined(parts: list[SfericCatalogue], duration_s: float) -> SfericCatalogue:
    if not parts:
        return SfericCatalogue(np.zeros(0), np.zeros(0), duration_s)
    return SfericCatalogue(
        np.concatenate([part.time_s for part in parts]),
        np.concatenate([part.amplitude for part in parts]),
        duration_s,
    )


def _rows(
    detections: list[Detection],
    sferics: SfericCatalogue,
    recording: Recording,
    model: FieldLineModel,
    settings: Settings,
) -> list[WhistlerRow]:
    found = [
        FoundTrace(
            item.reading.trace,
            item.l_value,
            item.density_m3,
            item.lightning_time_s,
            item.reading.centre_share_sd,
        )
        for item in detections
    ]
    rows: list[WhistlerRow] = []
    strokes = group_strokes(found, sferics, model=model, settings=settings)
    for number, stroke in enumerate(strokes, start=1):
        sightings = [
            Sighting(
                detections[k].snr_db,
                detections[k].candidate.false_alarms_per_hour,
                detections[k].reading.thickness_s,
            )
            for k in stroke.members
        ]
        for row in stroke_rows(
            stroke,
            sightings,
            group=number,
            recording=recording.path,
            model=model,
            ties=Ties(stroke.sferic),
            settings=settings,
        ):
            rows.append(replace(row, time=iso_time(recording.time_at(row.sferic_time_s))))
    return sorted(rows, key=lambda row: (row.group, row.hops, row.l_value, row.frequency_low_hz))


def _notices(recording: Recording) -> list[Notice]:
    if recording.start_time is not None:
        return []
    reason = "no date: the dipole of 2025.0 is used"
    return [Notice("N302", recording.path, reason, "give --start for the dipole of the day")]
