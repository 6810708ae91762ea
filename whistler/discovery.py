"""From spectrogram to traces: search, follow each candidate, peel it off, search again."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fieldlines import FieldLineModel, maximum_frequency, travel_time
from whistler.bank import DUCT_LIMIT, Bank, build_bank
from whistler.cleaning import CleanAudio
from whistler.fit import PathTrace, fit_stroke
from whistler.pattern import align
from whistler.search import Candidate, CurveSearch, Null, reference_delay_s
from whistler.settings import Settings
from whistler.spectrogram import Spectrogram
from whistler.trace import (
    LEAST_SNR,
    Curve,
    Trace,
    TraceReading,
    coarse_thickness,
    median_snr_db,
    read_trace,
    straighten,
)

LEAST_SPAN_HZ = 1500.0
WIDEST_S = 0.15  # lags looked at either side of a curve
DIFFUSE_S = 0.005  # thickness from which the speckle inside a trace must be averaged
PATTERN_BAND_HZ = 700.0  # wide enough to tell sub-paths apart, narrow enough for a fair number
PATTERN_SEARCH_S = 0.004
PATTERN_ROUNDS = 2
FEWEST_BANDS = 7  # made of a short band
LEAST_BANDS = 5  # that must share the pattern
LEAST_CORRELATION = 0.5
LEAST_POINTS = 6
WEAK_SHARE = 0.1  # of the power of the strong sub-bands, below which one does not count
MOST_MOVED_S = 0.05  # between the curve that was found and the one that was followed
LEAST_SHARE = 0.5  # of the sub-bands inside the traced band that must have been timed
MOST_PER_MINUTE = 80  # candidates followed; a recording this crowded is searched no deeper
FIRST_LOOK = 9.0  # sums followed before the null is taken: whistlers crossing it would raise it
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
    """

    smooth: int
    loss: float
    width_s: float
    windows_s: tuple[float, ...]


THIN = Pass(smooth=1, loss=0.25, width_s=0.012, windows_s=(0.06, 0.03, 0.02))
THICK = Pass(smooth=16, loss=0.3, width_s=0.064, windows_s=(0.15, 0.12, 0.10))


@dataclass(frozen=True)
class Detection:
    """A followed trace.

    Parameters
    ----------
    candidate : Candidate
        What the search saw.
    reading : TraceReading
        Points, strengths and thickness.
    l_value, density_m3, lightning_time_s : float
        One-hop-equivalent fit.
    snr_db : float
        Median ridge strength.
    """

    candidate: Candidate
    reading: TraceReading
    l_value: float
    density_m3: float
    lightning_time_s: float
    snr_db: float

    def curve(self, model: FieldLineModel) -> Curve:
        """Return arrival time as a function of frequency."""
        return one_hop_curve(self.l_value, self.density_m3, self.lightning_time_s, model)


def one_hop_curve(
    l_value: float, density_m3: float, lightning_time_s: float, model: FieldLineModel
) -> Curve:
    """Return arrival time against frequency; held level where the model ends."""
    top_hz = 0.97 * maximum_frequency(l_value, model=model)

    def curve(frequency_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        delay_s = travel_time(
            np.minimum(frequency_hz, top_hz),
            l_value=l_value,
            equatorial_density_m3=density_m3,
            model=model,
        )
        return lightning_time_s + delay_s

    return curve


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
) -> list[Detection]:
    """Return the traces in a block of cleaned audio, strongest first.

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
    list of Detection
        Each at least as strong as the threshold that the reversed recording sets.
    """
    left = replace(spectrogram, power=spectrogram.power.copy())
    found: list[Detection] = []
    for resolution in (THIN, THICK):
        bank = banks.bank(left.frequency_hz, resolution)
        search = CurveSearch(left, bank, smooth=resolution.smooth)
        new = list(_peel_off(search, audio, spectrogram, banks.model, resolution, FIRST_LOOK))
        null = search.null()
        threshold = null.threshold(0.5 * settings.false_alarms_per_hour)
        if threshold < FIRST_LOOK:
            new += _peel_off(search, audio, spectrogram, banks.model, resolution, threshold)
        for detection in new:
            if detection.candidate.strength >= threshold and not _seen(detection, found):
                found.append(_rated(detection, null))
                _erase(left, detection, banks.model)
    return found


def _rated(detection: Detection, null: Null) -> Detection:
    """State how often chance alone would be as strong."""
    rate = null.rate_per_hour(detection.candidate.strength)
    return replace(detection, candidate=replace(detection.candidate, false_alarms_per_hour=rate))


def _peel_off(
    search: CurveSearch,
    audio: CleanAudio,
    spectrogram: Spectrogram,
    model: FieldLineModel,
    resolution: Pass,
    threshold: float,
) -> Iterator[Detection]:
    """Follow and remove the strongest sums until none is left above the threshold."""
    left = max(20, round(MOST_PER_MINUTE * spectrogram.power.shape[1] * spectrogram.hop_s / 60.0))
    while left > 0:
        peaks = search.peaks(threshold, apart_s=APART_S)
        if not peaks:
            return
        for at in peaks[:left]:
            left -= 1
            candidate = search.candidate(at)
            detection = follow(candidate, audio, spectrogram, model=model, resolution=resolution)
            ridges = [(candidate.curve_s, candidate.thickness_s)]
            if detection is not None:
                curve_s = detection.curve(model)(candidate.frequency_hz)
                ridges.append((curve_s, detection.reading.thickness_s))
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


def _seen(detection: Detection, found: list[Detection]) -> bool:
    """Whether a trace is one already found: what peeling left of it."""
    points = detection.reading.trace
    for other in found:
        seen = other.reading.trace
        apart = np.abs(
            points.time_s - np.interp(points.frequency_hz, seen.frequency_hz, seen.time_s)
        )
        overlap = (points.frequency_hz >= seen.frequency_hz[0]) & (
            points.frequency_hz <= seen.frequency_hz[-1]
        )
        near_s = 0.012 + 2.0 * max(other.reading.thickness_s, detection.reading.thickness_s)
        if overlap.sum() >= 3 and np.median(apart[overlap]) < near_s:
            return True
    return False


def _half_width_s(
    frequency_hz: NDArray[np.float64], curve_s: NDArray[np.float64], thickness_s: float
) -> NDArray[np.float64]:
    """Half the time a trace fills in each channel: its own cell, the window, its thickness."""
    slope = np.abs(np.gradient(curve_s, frequency_hz))
    return 0.014 + 0.7 * np.sqrt(slope) + 40.0 * slope + 2.5 * thickness_s


def _erase(spectrogram: Spectrogram, detection: Detection, model: FieldLineModel) -> None:
    """Set the ridge to the noise mean, so that the next pass does not see it."""
    frequency_hz = detection.candidate.frequency_hz
    curve_s = detection.curve(model)(frequency_hz)
    half = _half_width_s(frequency_hz, curve_s, detection.reading.thickness_s) + 0.01
    time_s = spectrogram.time_s
    for channel_hz, middle, reach in zip(frequency_hz, curve_s, half, strict=True):
        channel = int(np.searchsorted(spectrogram.frequency_hz, channel_hz))
        low, high = np.searchsorted(time_s, (middle - reach, middle + reach))
        spectrogram.power[channel, low:high] = 1.0


def follow(
    candidate: Candidate,
    audio: CleanAudio,
    spectrogram: Spectrogram,
    *,
    model: FieldLineModel,
    resolution: Pass,
) -> Detection | None:
    """Return the trace behind a candidate, or None when its sub-bands do not bear it out.

    Parameters
    ----------
    candidate : Candidate
        What the search saw.
    audio, spectrogram
        The block.
    model : fieldlines.FieldLineModel
        Gives the curve.
    resolution : Pass
        Lags accepted, round by round.

    Returns
    -------
    Detection or None
        A trace spans at least 1.5 kHz, and half of its sub-bands were timed.
    """
    l_value, density = candidate.l_value, candidate.density_m3
    own = one_hop_curve(l_value, density, 0.0, model)
    reference_s = reference_delay_s(candidate.frequency_hz, own(candidate.frequency_hz))
    time_s = candidate.time_s - reference_s
    reading = None
    thickness_s: float | None = None
    for k, window_s in enumerate(resolution.windows_s):
        curve = one_hop_curve(l_value, density, time_s, model)
        band_hz = candidate.band_hz if k == 0 else _full_band(l_value, spectrogram, model)
        view = straighten(audio, curve, band_hz=band_hz, reach_s=WIDEST_S)
        if view is None:
            return None
        if k > 0:
            thickness_s = coarse_thickness(view)
        wide = thickness_s is not None and thickness_s > DIFFUSE_S
        reading = read_trace(
            view,
            curve,
            window_s=max(window_s, min(2.5 * (thickness_s or 0.0), WIDEST_S)),
            thickness_s=thickness_s if wide else None,
        )
        if reading is None:
            return None
        fit = fit_stroke(
            [PathTrace(reading.trace, 1, 0)],
            start=[(l_value, density)],
            lightning_time_s=time_s,
            model=model,
            final=False,
        )
        (l_value, density), time_s = fit.start[0], fit.lightning_time_s
        if fit.at_bound[0]:
            return None
    curve = one_hop_curve(l_value, density, time_s, model)
    if reading is None or not (_borne_out(reading) and _as_found(candidate, curve)):
        return None
    reading, (l_value, density), time_s = _sharpen(
        audio, reading, (l_value, density), time_s, model=model
    )
    curve = one_hop_curve(l_value, density, time_s, model)
    snr_db = median_snr_db(
        spectrogram.power, spectrogram.frequency_hz, spectrogram.time_s, reading.trace, curve
    )
    return Detection(candidate, reading, l_value, density, time_s, snr_db)


def _sharpen(
    audio: CleanAudio,
    reading: TraceReading,
    start: tuple[float, float],
    time_s: float,
    *,
    model: FieldLineModel,
) -> tuple[TraceReading, tuple[float, float], float]:
    """Time wider sub-bands against the pattern they share; keep the old points if they share none."""
    low_hz, high_hz = reading.trace.frequency_hz[[0, -1]]
    count = max(FEWEST_BANDS, round((high_hz - low_hz) / PATTERN_BAND_HZ))
    spacing_hz = (high_hz - low_hz) / count
    for _ in range(PATTERN_ROUNDS):
        curve = one_hop_curve(*start, time_s, model)
        view = straighten(
            audio, curve, band_hz=(low_hz, high_hz), spacing_hz=spacing_hz, reach_s=WIDEST_S
        )
        if view is None:
            return reading, start, time_s
        aligned = align(
            view,
            curve(view.frequency_hz) - time_s,
            search_s=PATTERN_SEARCH_S,
            thickness_s=reading.thickness_s,
        )
        kept = aligned.correlation >= LEAST_CORRELATION
        if kept.sum() < LEAST_BANDS:
            return reading, start, time_s
        trace = Trace(
            view.frequency_hz[kept],
            curve(view.frequency_hz)[kept] + aligned.lag_s[kept],
            aligned.lag_sd_s(view.band_width_hz)[kept],
        )
        fit = fit_stroke(
            [PathTrace(trace, 1, 0)], start=[start], lightning_time_s=time_s, model=model
        )
        start, time_s = fit.start[0], fit.lightning_time_s
    snr = view.power.max(axis=1)[kept]
    sharper = TraceReading(trace, snr, reading.thickness_s, aligned.centre_share_sd)
    return sharper, start, time_s


def _full_band(
    l_value: float, spectrogram: Spectrogram, model: FieldLineModel
) -> tuple[float, float]:
    top_hz = min(
        float(spectrogram.frequency_hz[-1]), DUCT_LIMIT * maximum_frequency(l_value, model=model)
    )
    return float(spectrogram.frequency_hz[0]), max(top_hz, 2500.0)


def _as_found(candidate: Candidate, curve: Curve) -> bool:
    """Whether the trace still runs where the search saw power: else it is made of something else."""
    inside = (candidate.frequency_hz >= candidate.band_hz[0]) & (
        candidate.frequency_hz <= candidate.band_hz[1]
    )
    moved_s = curve(candidate.frequency_hz[inside]) - candidate.curve_s[inside]
    return bool(np.median(np.abs(moved_s)) <= MOST_MOVED_S)


def _borne_out(reading: TraceReading) -> bool:
    """Whether enough sub-bands, over a wide enough band, carry a fair share of the power."""
    strong = reading.snr >= WEAK_SHARE * np.quantile(reading.snr, 0.75)
    frequency_hz = reading.trace.frequency_hz[strong]
    if len(frequency_hz) < LEAST_POINTS:
        return False
    span_hz = frequency_hz[-1] - frequency_hz[0]
    spacing_hz = float(np.min(np.diff(reading.trace.frequency_hz)))
    share = len(frequency_hz) / (1.0 + span_hz / spacing_hz)
    return bool(span_hz >= LEAST_SPAN_HZ and share >= LEAST_SHARE)


__all__ = [
    "LEAST_SNR",
    "THICK",
    "THIN",
    "Banks",
    "Detection",
    "Null",
    "Pass",
    "find_traces",
    "follow",
    "one_hop_curve",
]
