"""The whole of one recording: block by block to traces, then strokes, then rows."""

from __future__ import annotations

import html
import json
import os
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

from fieldlines import FieldLineModel
from whistler.cleaning import CleanAudio, clean
from whistler.clock import decimal_year, iso_time
from whistler.discovery import Banks, find_traces, seen_before
from whistler.errors import Notice, printable
from whistler.evidence import FoundTrace
from whistler.follow import Detection
from whistler.group import group_strokes
from whistler.model import field_line_model, receiver_latitude
from whistler.problem import Ties
from whistler.recording import AudioBlock, Recording, open_recording
from whistler.results import Sighting, stroke_rows
from whistler.rows import COLUMNS, WhistlerRow
from whistler.settings import Settings
from whistler.sferic import SfericCatalogue
from whistler.spectrogram import Spectrogram, spectrogram

if TYPE_CHECKING:
    from matplotlib.figure import Figure

BLOCK_S = 160.0
OVERLAP_S = 20.0  # a five-hop whistler with its sferic is whole in one block or the next
SEAM_S = 0.2
MOST_IN_BLOCK = 1000  # detections of earlier blocks that a seam can repeat
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
        The default model of the fits.
    false_alarms_per_hour : float
        False detections to expect in an hour, from the recording reversed in time.
    """

    recording: Recording
    settings: Settings
    rows: tuple[WhistlerRow, ...]
    notices: tuple[Notice, ...]
    views: tuple[Spectrogram, ...]
    sferics: SfericCatalogue
    model: FieldLineModel
    false_alarms_per_hour: float = float("nan")

    # The methods below are for notebooks. What they need from modules that stand above this one
    # they ask of the package by its public names, and only when called.

    def to_pandas(self) -> Any:
        """Return the rows as a pandas table with the catalogue's columns; NaN is undetermined.

        Raises
        ------
        ImportError
            When pandas is not installed.
        """
        try:
            import pandas  # type: ignore[import-untyped]  # it comes without types
        except ImportError as error:
            extra = "python -m pip install 'whistler-analyser[notebook]'"
            raise ImportError(f"to_pandas needs pandas; install it with {extra}") from error
        names = [column.name for column in COLUMNS]
        table = pandas.DataFrame({name: [getattr(r, name) for r in self.rows] for name in names})
        table["time"] = pandas.to_datetime(table["time"], utc=True, format="ISO8601")
        table["flags"] = [" ".join(row.flags) for row in self.rows]
        return table

    def to_json(self) -> str:
        """Return the document that ``whistler measure --json`` prints."""
        from whistler import measurement_document

        document = measurement_document([self], self.settings)
        return json.dumps(document, allow_nan=False, indent=1)

    def plot(self, group: int | None = None) -> Figure:
        """Return the figure of the recording, or of the stroke with this number.

        Raises
        ------
        ValueError
            When there is no such stroke.
        """
        from whistler import plot_recording, plot_stroke

        return plot_recording(self) if group is None else plot_stroke(self, group)

    def __repr__(self) -> str:
        """Return one line: the fields hold a whole spectrogram."""
        return f"<Measurement of {self.recording.path!r}: {len(self.rows)} traces>"

    def _repr_html_(self) -> str:
        """Return the rows as a table for notebooks."""
        head = "".join(f"<th>{title}</th>" for title in _HTML_HEAD)
        body = "".join(f"<tr>{_html_cells(row)}</tr>" for row in self.rows)
        name = html.escape(printable(os.path.basename(self.recording.path)))  # noqa: PTH119  any text
        began = iso_time(self.recording.start_time) or "start unknown"
        caption = f"{name}, {began}, {self.recording.duration_s:.1f} s: {len(self.rows)} traces"
        return f"<table><caption>{caption}</caption><tr>{head}</tr>{body}</table>"


_HTML_HEAD = ("stroke", "sferic, s", "hops", "L", "n, cm⁻³", "SNR, dB", "σ", "flags")


def _html_cells(row: WhistlerRow) -> str:
    cells = (
        str(row.group),
        f"{row.sferic_time_s:.3f}{'' if row.sferic_seen else ' (predicted)'}",
        str(row.hops),
        f"{row.l_value:.3f} ± {row.l_value_sd:.1g} (± {row.l_value_profile_sd:.2f})",
        f"{row.equatorial_density_cm3:.0f} ± {row.equatorial_density_sd_cm3:.1f} "
        f"(± {row.equatorial_density_profile_sd_cm3:.0f})",
        f"{row.snr_db:.0f}",
        row.uncertainty_status,
        " ".join(row.flags),
    )
    return "".join(f"<td>{html.escape(cell.replace('nan', '–'))}</td>" for cell in cells)


@dataclass(frozen=True)
class _BlockResult:
    detections: list[Detection]
    false_alarms_per_hour: float
    sferics: SfericCatalogue
    view: Spectrogram | None


def measure_recording(
    recording: Recording | str | os.PathLike[str],
    settings: Settings | None = None,
    *,
    progress: Progress | None = None,
) -> Measurement:
    """Return every whistler of a recording with L, density and their error bars.

    Parameters
    ----------
    recording : Recording, str or path-like
        Opened recording, or a file to open with the settings' station and channel.
    settings : Settings, optional
        What to measure with; the defaults if left out.
    progress : callable, optional
        Called with the share done, 0 to 1.

    Returns
    -------
    Measurement
        Rows, and what a figure of them needs.
    """
    settings = settings or Settings()
    if not isinstance(recording, Recording):
        recording = open_recording(recording, station=settings.station, channel=settings.channel)
    model = field_line_model(settings, decimal_year=decimal_year(recording.start_time))
    banks = _banks(_bank_model(recording, settings), settings)
    results: list[_BlockResult] = []
    keep = recording.duration_s <= VIEWED_S
    for block in recording.blocks(BLOCK_S, overlap_s=OVERLAP_S):
        result = _measure_block(block, recording, banks, settings)
        results.append(result if keep else replace(result, view=None))
        if progress is not None:
            done = block.first_frame + len(block.samples)
            progress(done / max(recording.frame_count, 1))
    detections = _once(results)
    sferics = _joined([result.sferics for result in results], recording.duration_s)
    rows = _rows(detections, sferics, recording, model, settings)
    return Measurement(
        recording=recording,
        settings=settings,
        rows=tuple(rows),
        notices=(),
        views=tuple(result.view for result in results if result.view is not None),
        sferics=sferics,
        model=model,
        false_alarms_per_hour=_mean_rate(results),
    )


def _mean_rate(results: list[_BlockResult]) -> float:
    """False alarms to expect in an hour, block by block by its length."""
    if not results:
        return float("nan")
    duration_s = [result.sferics.duration_s for result in results]
    return float(np.average([one.false_alarms_per_hour for one in results], weights=duration_s))


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
    audio = clean(block, settings=settings)
    view = spectrogram(audio, band_low_hz=settings.band_low_hz)
    # What the overlap shows twice belongs to the block that holds more of it; near the seam both
    # keep it, since each may time it a little to the other's side.
    low_s = start_s + 0.5 * OVERLAP_S if block.first_frame > 0 else -np.inf
    at_end = block.first_frame + len(block.samples) >= recording.frame_count
    high_s = np.inf if at_end else end_s - 0.5 * OVERLAP_S
    found = find_traces(audio, view, banks=banks, settings=settings)
    detections = [
        item for item in found.traces if low_s - SEAM_S <= item.candidate.time_s < high_s + SEAM_S
    ]
    sferics = _within(audio, low_s, high_s)
    return _BlockResult(detections, found.false_alarms_per_hour, sferics, view)


def _once(results: list[_BlockResult]) -> list[Detection]:
    """All detections; what two blocks saw on both sides of their seam, once."""
    kept: list[Detection] = []
    for result in results:
        before = kept[-MOST_IN_BLOCK:]
        kept += [item for item in result.detections if not seen_before(item, before)]
    return kept


def _within(audio: CleanAudio, low_s: float, high_s: float) -> SfericCatalogue:
    inside = (audio.sferics.time_s >= low_s) & (audio.sferics.time_s < high_s)
    return SfericCatalogue(
        audio.sferics.time_s[inside],
        audio.sferics.amplitude[inside],
        audio.sferics.duration_s,
        audio.sferics.front_hz,
    )


def _joined(parts: list[SfericCatalogue], duration_s: float) -> SfericCatalogue:
    if not parts:
        return SfericCatalogue(np.zeros(0), np.zeros(0), duration_s)
    return SfericCatalogue(
        np.concatenate([part.time_s for part in parts]),
        np.concatenate([part.amplitude for part in parts]),
        duration_s,
        parts[0].front_hz,
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
            item.path.l_value,
            item.path.density_m3,
            item.path.lightning_time_s,
            item.reading.centre_share_sd,
        )
        for item in detections
    ]
    rows: list[WhistlerRow] = []
    latitude_rad = receiver_latitude(settings, decimal_year=decimal_year(recording.start_time))
    strokes = group_strokes(
        found, sferics, model=model, settings=settings, receiver_latitude_rad=latitude_rad
    )
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
            receiver_latitude_rad=latitude_rad,
        ):
            rows.append(replace(row, time=iso_time(recording.time_at(row.sferic_time_s))))
    return sorted(rows, key=lambda row: (row.group, row.hops, row.l_value, row.frequency_low_hz))
