"""From spectrogram to traces: search, follow each candidate, peel it off, search again."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fieldlines import FieldLineModel
from whistler.bank import Bank, build_bank
from whistler.chance import Null
from whistler.cleaning import CleanAudio
from whistler.follow import DIFFUSE_S, Detection, follow
from whistler.search import CurveSearch
from whistler.settings import Settings
from whistler.spectrogram import Spectrogram

MOST_PER_MINUTE = 80  # candidates followed; a recording this crowded is searched no deeper
FIRST_LOOK = 9.0  # sums followed before the null is taken: whistlers crossing it would raise it
SAME_S = 0.012  # two readings of one thin trace are nearer than that
BESIDE_S = 0.15  # what peeling leaves of a trace lies within it
LEAST_OVERLAP = 3  # points
APART_S = 1.5  # between peaks handled in one round: their ridges do not touch


@dataclass(frozen=True)
class Pass:
    """One resolution of the search.

    Parameters
    ----------
    smooth : int
        Spectrogram frames averaged.
    loss : float
        Worst power lost between templates.
    width_s : float
        Time resolution.
    windows_s : tuple of float
        Lags accepted in each round of de-dispersing and timing.
    borne_out : float
        Share of chance sums that their sub-bands bear out: 1 of 127 thin ones was, on recordings of
        other seeds, but more of strong ones; of diffuse ones, whose pulses are broad, most.
    """

    smooth: int
    loss: float
    width_s: float
    windows_s: tuple[float, ...]
    borne_out: float


THIN = Pass(1, loss=0.3, width_s=0.012, windows_s=(0.06, 0.03, 0.02), borne_out=0.1)
THICK = Pass(16, loss=0.3, width_s=0.064, windows_s=(0.15, 0.12, 0.10), borne_out=0.3)


@dataclass(frozen=True)
class Discovery:
    """What was found in a block of audio.

    Parameters
    ----------
    traces : tuple of Detection
        Pass by pass, each at least as strong as the threshold that the reversed block sets.
    false_alarms_per_hour : float
        Expected at these thresholds from what the reversed block shows.
    """

    traces: tuple[Detection, ...]
    false_alarms_per_hour: float


class Banks:
    """The template banks of one analysis, built once for all its recordings.

    Parameters
    ----------
    model : fieldlines.FieldLineModel
        Field, profile and ions.
    settings : Settings
        L range, band and hops.
    """

    def __init__(self, model: FieldLineModel, settings: Settings) -> None:
        self.model = model
        self.settings = settings
        self._kept: dict[tuple[float, int, float, float], Bank] = {}

    def bank(self, frequency_hz: NDArray[np.float64], resolution: Pass) -> Bank:
        """Return the bank of one pass at a spectrogram's channels."""
        key = (resolution.width_s, len(frequency_hz), frequency_hz[0], frequency_hz[-1])
        if key not in self._kept:
            self._kept[key] = build_bank(
                self.model,
                l_range=self.settings.l_range,
                band_hz=(float(frequency_hz[0]), float(frequency_hz[-1])),
                max_hops=self.settings.max_hops,
                loss=resolution.loss,
                width_s=resolution.width_s,
                frequency_hz=frequency_hz,
            )
        return self._kept[key]


def find_traces(
    audio: CleanAudio, spectrogram: Spectrogram, *, banks: Banks, settings: Settings
) -> Discovery:
    """Return the traces in a block of cleaned audio, and how many may be chance.

    Parameters
    ----------
    audio : CleanAudio
        The block.
    spectrogram : Spectrogram
        Its normalised power.
    banks : Banks
        Template banks.
    settings : Settings
        False-alarm rate and band.

    Returns
    -------
    Discovery
        Traces that their own sub-bands bear out.
    """
    left = replace(spectrogram, power=spectrogram.power.copy())
    found: list[Detection] = []
    rate = 0.0
    for resolution in (THIN, THICK):
        bank = banks.bank(left.frequency_hz, resolution)
        search = CurveSearch(left, bank, smooth=resolution.smooth)
        known = [*found]
        parts = (search, audio, spectrogram, banks.model, resolution)
        new = list(_peel_off(*parts, threshold=FIRST_LOOK, known=known))
        null = search.null()
        # Half of the rate for either pass.
        rate_wanted = 0.5 * settings.false_alarms_per_hour
        threshold = null.threshold(rate_wanted / resolution.borne_out)
        # Remains of a neighbour are no chance sums, and their sub-bands may bear them out.
        beside = null.threshold(rate_wanted)
        if threshold < FIRST_LOOK:
            new += _peel_off(*parts, threshold=threshold, known=known)
        for detection in new:
            near = any(_distance_s(detection, other) < BESIDE_S for other in found)
            needed = beside if near else threshold
            if detection.candidate.strength >= needed and not seen_before(detection, found):
                found.append(_rated(detection, 1.0 if near else resolution.borne_out, null))
                _erase(left, detection, banks.model)
        # Where the strongest reversed sum sets the threshold, no less than one in the block.
        rate += resolution.borne_out * null.rate_per_hour(threshold)
    return Discovery(tuple(found), rate)


def _rated(detection: Detection, borne_out: float, null: Null) -> Detection:
    """State how often chance alone would be as strong."""
    rate = borne_out * null.rate_per_hour(detection.candidate.strength)
    return replace(detection, candidate=replace(detection.candidate, false_alarms_per_hour=rate))


def _peel_off(
    search: CurveSearch,
    audio: CleanAudio,
    spectrogram: Spectrogram,
    model: FieldLineModel,
    resolution: Pass,
    *,
    threshold: float,
    known: list[Detection],
) -> Iterator[Detection]:
    """Follow and remove the strongest sums until none is left above the threshold.

    What is followed joins those `known`.
    """
    left = max(20, round(MOST_PER_MINUTE * spectrogram.power.shape[1] * spectrogram.hop_s / 60.0))
    while left > 0:
        peaks = search.peaks(threshold, apart_s=APART_S)
        if not peaks:
            return
        for at in peaks[:left]:
            left -= 1
            candidate = search.candidate(at, threshold=threshold)
            if candidate is None:
                continue
            detection = follow(
                candidate,
                audio,
                spectrogram=spectrogram,
                model=model,
                windows_s=resolution.windows_s,
                known=known,
            )
            ridges = [(candidate.curve_s, 0.5 * candidate.thickness_s)]
            if detection is not None:
                curve_s = detection.path.curve(model)(candidate.frequency_hz)
                ridges.append((curve_s, detection.reading.thickness_s))
                known.append(detection)
                yield detection
            search.peel(
                candidate.frequency_hz,
                [
                    (curve_s, _half_width_s(candidate.frequency_hz, curve_s, thickness_s))
                    for curve_s, thickness_s in ridges
                ],
                time_s=candidate.time_s,
            )
        search.refresh()


def seen_before(detection: Detection, found: list[Detection]) -> bool:
    """Return whether a trace is one already found: what peeling left of it, or a seam repeats.

    Parameters
    ----------
    detection : Detection
        The trace in question.
    found : list of Detection
        Those before it.

    Returns
    -------
    bool
        True when it runs within 12 ms, and twice the thickness, of one of them.
    """
    return any(
        _distance_s(detection, other)
        < SAME_S + 2.0 * max(other.reading.thickness_s, detection.reading.thickness_s)
        for other in found
    )


def _distance_s(detection: Detection, other: Detection) -> float:
    """Median distance in time of a trace's points from another trace, where that has any."""
    points, seen = detection.reading.trace, other.reading.trace
    overlap = (points.frequency_hz >= seen.frequency_hz[0]) & (
        points.frequency_hz <= seen.frequency_hz[-1]
    )
    if overlap.sum() < LEAST_OVERLAP:
        return float("inf")
    apart_s = points.time_s - np.interp(points.frequency_hz, seen.frequency_hz, seen.time_s)
    return float(np.median(np.abs(apart_s[overlap])))


def _half_width_s(
    frequency_hz: NDArray[np.float64], curve_s: NDArray[np.float64], thickness_s: float
) -> NDArray[np.float64]:
    """Half the time a trace fills in each channel: its own cell, the window, its thickness."""
    slope = np.abs(np.gradient(curve_s, frequency_hz))
    if thickness_s > DIFFUSE_S:
        return 0.014 + 0.7 * np.sqrt(slope) + 40.0 * slope + 2.0 * thickness_s
    return 0.012 + 0.5 * np.sqrt(slope) + 25.0 * slope + 1.5 * thickness_s


def _erase(spectrogram: Spectrogram, detection: Detection, model: FieldLineModel) -> None:
    """Set the ridge to the noise mean, so that the next pass does not see it."""
    frequency_hz = detection.candidate.frequency_hz
    curve_s = detection.path.curve(model)(frequency_hz)
    half = _half_width_s(frequency_hz, curve_s, detection.reading.thickness_s) + 0.01
    time_s = spectrogram.time_s
    for channel_hz, middle, reach in zip(frequency_hz, curve_s, half, strict=True):
        channel = int(np.searchsorted(spectrogram.frequency_hz, channel_hz))
        low, high = np.searchsorted(time_s, (middle - reach, middle + reach))
        spectrogram.power[channel, low:high] = 1.0
