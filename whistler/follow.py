"""From a candidate to a measured trace: de-disperse, time, fit, again with the better curve."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fieldlines import FieldLineModel, maximum_frequency, saturated_density, travel_time
from whistler.bank import DENSITY_SPREAD, DUCT_LIMIT
from whistler.cleaning import CleanAudio
from whistler.fit import StrokeFit, fit_stroke
from whistler.pattern import align
from whistler.problem import PathTrace
from whistler.search import Candidate, reference_delay_s
from whistler.spectrogram import Spectrogram
from whistler.trace import (
    SUB_BAND_HZ,
    Curve,
    Straightened,
    Trace,
    TraceReading,
    coarse_thickness,
    median_snr_db,
    read_trace,
    straighten,
)

NEAR_S = 1.0  # between candidates that may run close to each other somewhere
NARROW_S = 0.025  # lags that leave a neighbour out
THIN_S = 0.0015
PULSE_S = 0.004  # half of what a thin trace takes up in a sub-band
WIDEST_S = 0.15  # lags looked at either side of a curve
DIFFUSE_S = 0.005  # thickness from which the speckle inside a trace must be averaged
LEAST_SPAN_HZ = 1500.0
LEFT_SPAN_HZ = 1000.0  # of the sub-bands that share the pattern
LEAST_SHARE = 0.5  # of the sub-bands inside the traced band that must have been timed
WIDEST_GAP = 2.5  # inside a trace, in sub-bands
FEWEST_TIMED = 4
WEAK_SHARE = 0.1  # of the power of the strong sub-bands, below which one does not count
MOST_MOVED_S = 0.05  # between the curve that was found and the one that was followed
OUTSIDE_BANK = 1.7  # factor below the bank's densities from which a fit is something else
PATTERN_BAND_HZ = 700.0  # wide enough to tell sub-paths apart, narrow enough for a fair number
PATTERN_SEARCH_S = 0.004
PATTERN_ROUNDS = 2
FEWEST_BANDS = 7  # made of a short band
LEAST_BANDS = 5  # that must share the pattern
LEAST_CORRELATION = 0.5


@dataclass(frozen=True)
class Split:
    """How a trace's band is split up.

    Parameters
    ----------
    spacing_hz : float
        Between sub-bands.
    least_bands : int
        That even a narrow band is split into.
    least_points : int
        Of these, that must be timed.
    least_span_hz : float
        That they must span.
    """

    spacing_hz: float
    least_bands: int
    least_points: int
    least_span_hz: float


FINE = Split(SUB_BAND_HZ, 10, 6, LEAST_SPAN_HZ)
COARSE = Split(700.0, 7, 5, 2200.0)  # pulses of weak traces stand out more from wider sub-bands


@dataclass(frozen=True)
class OneHop:
    """A curve as one hop: what several hops look like before their number is known.

    Parameters
    ----------
    l_value : float
        Field line.
    density_m3 : float
        Equatorial density that delays as much in one hop.
    lightning_time_s : float
        Start of the curve, s from the recording's first frame.
    """

    l_value: float
    density_m3: float
    lightning_time_s: float

    def curve(self, model: FieldLineModel) -> Curve:
        """Return arrival time against frequency; held level where the model ends."""
        top_hz = 0.97 * maximum_frequency(self.l_value, model=model)

        def arrival_s(frequency_hz: NDArray[np.float64]) -> NDArray[np.float64]:
            delay_s = travel_time(
                np.minimum(frequency_hz, top_hz),
                l_value=self.l_value,
                equatorial_density_m3=self.density_m3,
                model=model,
            )
            return self.lightning_time_s + delay_s

        return arrival_s


@dataclass(frozen=True)
class Detection:
    """A followed trace.

    Parameters
    ----------
    candidate : Candidate
        What the search saw.
    reading : TraceReading
        Points, strengths and thickness.
    path : OneHop
        One-hop-equivalent fit.
    snr_db : float
        Median ridge strength.
    """

    candidate: Candidate
    reading: TraceReading
    path: OneHop
    snr_db: float


def follow(
    candidate: Candidate,
    audio: CleanAudio,
    *,
    spectrogram: Spectrogram,
    model: FieldLineModel,
    windows_s: tuple[float, ...],
    known: Sequence[Detection] = (),
) -> Detection | None:
    """Return the trace behind a candidate, or None when its sub-bands do not bear it out.

    Parameters
    ----------
    candidate : Candidate
        What the search saw.
    audio : CleanAudio
        The block.
    spectrogram : Spectrogram
        Its normalised power.
    model : fieldlines.FieldLineModel
        Gives the curve.
    windows_s : tuple of float
        Lags accepted, round by round.
    known : sequence of Detection
        Traces already followed: what lies on them is theirs.

    Returns
    -------
    Detection or None
        A trace spans at least 1.5 kHz, and half of its sub-bands were timed.
    """
    near = [other for other in known if abs(other.candidate.time_s - candidate.time_s) < NEAR_S]
    narrow_s = tuple(min(window_s, NARROW_S) for window_s in windows_s)
    found = _followed(candidate, audio, spectrogram, model, narrow_s, FINE, near)
    if found is None or found[0].thickness_s > THIN_S:
        # No thin pulses within a window that leaves neighbours out: a diffuse trace, or a weak one.
        for split in (FINE, COARSE):
            found = _followed(candidate, audio, spectrogram, model, windows_s, split, near)
            if found is not None:
                break
    if found is None:
        return None
    reading, path = _sharpen(audio, found[0], path=found[1], model=model, known=near)
    if np.ptp(reading.trace.frequency_hz) < LEFT_SPAN_HZ or _in_one_piece(reading) is None:
        return None
    snr_db = median_snr_db(spectrogram, reading.trace, curve=path.curve(model))
    return Detection(candidate, reading, path, snr_db)


def _followed(
    candidate: Candidate,
    audio: CleanAudio,
    spectrogram: Spectrogram,
    model: FieldLineModel,
    windows_s: tuple[float, ...],
    split: Split,
    known: Sequence[Detection],
) -> tuple[TraceReading, OneHop] | None:
    """The trace as its sub-bands show it, when they bear it out."""
    path = _start(candidate, model)
    thickness_s: float | None = None
    reading = None
    for number, window_s in enumerate(windows_s):
        band_hz = candidate.band_hz if number == 0 else _full_band(path, spectrogram, model)
        view = straighten(
            audio,
            path.curve(model),
            band_hz=band_hz,
            spacing_hz=min(split.spacing_hz, (band_hz[1] - band_hz[0]) / split.least_bands),
            reach_s=WIDEST_S,
        )
        if view is None:
            return None
        view = _apart_from(known, view, path.curve(model), model)
        if number > 0:
            thickness_s = coarse_thickness(view)
        reading = read_trace(
            view,
            path.curve(model),
            window_s=max(window_s, min(2.5 * (thickness_s or 0.0), WIDEST_S)),
            thickness_s=thickness_s if (thickness_s or 0.0) > DIFFUSE_S else None,
        )
        reading = None if reading is None else _in_one_piece(reading)
        if reading is None:
            return None
        fit, path = _refit(reading.trace, path, model)
        if fit.at_bound[0]:
            return None
    if reading is None or not _borne_out(reading, split):
        return None
    return (reading, path) if _as_found(candidate, path, model) else None


def _apart_from(
    known: Sequence[Detection], view: Straightened, curve: Curve, model: FieldLineModel
) -> Straightened:
    """The view with what lies on other thin traces at the level of the noise.

    The wings of a diffuse trace would look like traces of their own without its middle.
    """
    thin = [other for other in known if other.reading.thickness_s <= DIFFUSE_S]
    if not thin:
        return view
    power = view.power.copy()
    for other in thin:
        lag_s = other.path.curve(model)(view.frequency_hz) - curve(view.frequency_hz)
        width_s = PULSE_S + 1.5 * other.reading.thickness_s
        power[np.abs(view.lag_s - lag_s[:, None]) < width_s] = 1.0
    return replace(view, power=power)


def _start(candidate: Candidate, model: FieldLineModel) -> OneHop:
    """The candidate's curve, started so that it passes the reference frequency when it did."""
    path = OneHop(candidate.l_value, candidate.density_m3, 0.0)
    delay_s = path.curve(model)(candidate.frequency_hz)
    time_s = candidate.time_s - reference_delay_s(candidate.frequency_hz, delay_s)
    return OneHop(candidate.l_value, candidate.density_m3, time_s)


def _refit(trace: Trace, path: OneHop, model: FieldLineModel) -> tuple[StrokeFit, OneHop]:
    fit = fit_stroke(
        [PathTrace(trace, 1, 0)],
        start=[(path.l_value, path.density_m3)],
        lightning_time_s=path.lightning_time_s,
        model=model,
        final=False,
    )
    return fit, OneHop(*fit.start[0], fit.lightning_time_s)


def _full_band(
    path: OneHop, spectrogram: Spectrogram, model: FieldLineModel
) -> tuple[float, float]:
    duct_hz = DUCT_LIMIT * maximum_frequency(path.l_value, model=model)
    top_hz = min(float(spectrogram.frequency_hz[-1]), duct_hz)
    return float(spectrogram.frequency_hz[0]), max(top_hz, 2500.0)


def _as_found(candidate: Candidate, path: OneHop, model: FieldLineModel) -> bool:
    """Whether the trace still runs where the search saw power, and not through something else."""
    inside = (candidate.frequency_hz >= candidate.band_hz[0]) & (
        candidate.frequency_hz <= candidate.band_hz[1]
    )
    moved_s = path.curve(model)(candidate.frequency_hz[inside]) - candidate.curve_s[inside]
    thinnest = float(saturated_density(path.l_value)) / DENSITY_SPREAD / OUTSIDE_BANK
    return bool(np.median(np.abs(moved_s)) <= MOST_MOVED_S and path.density_m3 >= thinnest)


def _in_one_piece(reading: TraceReading) -> TraceReading | None:
    """The longest run of points: chance peaks far above a trace's band would decide its L."""
    trace = reading.trace
    spacing_hz = float(np.min(np.diff(trace.frequency_hz)))
    gaps = np.flatnonzero(np.diff(trace.frequency_hz) > WIDEST_GAP * spacing_hz) + 1
    run = max(np.split(np.arange(len(trace.frequency_hz)), gaps), key=len)
    if len(run) < FEWEST_TIMED:
        return None
    own = Trace(trace.frequency_hz[run], trace.time_s[run], trace.time_sd_s[run])
    return replace(reading, trace=own, snr=reading.snr[run])


def _borne_out(reading: TraceReading, split: Split) -> bool:
    """Whether enough sub-bands, over a wide enough band, carry a fair share of the power."""
    strong = reading.snr >= WEAK_SHARE * np.quantile(reading.snr, 0.75)
    frequency_hz = reading.trace.frequency_hz[strong]
    if len(frequency_hz) < split.least_points:
        return False
    span_hz = frequency_hz[-1] - frequency_hz[0]
    spacing_hz = float(np.min(np.diff(reading.trace.frequency_hz)))
    share = len(frequency_hz) / (1.0 + span_hz / spacing_hz)
    return bool(span_hz >= split.least_span_hz and share >= LEAST_SHARE)


def _sharpen(
    audio: CleanAudio,
    reading: TraceReading,
    *,
    path: OneHop,
    model: FieldLineModel,
    known: Sequence[Detection],
) -> tuple[TraceReading, OneHop]:
    """Time wider sub-bands on the pattern they share; keep the old points if they share none."""
    low_hz, high_hz = reading.trace.frequency_hz[[0, -1]]
    count = max(FEWEST_BANDS, round((high_hz - low_hz) / PATTERN_BAND_HZ))
    sharper, better = reading, path
    for _ in range(PATTERN_ROUNDS):
        curve = better.curve(model)
        view = straighten(
            audio,
            curve,
            band_hz=(low_hz, high_hz),
            spacing_hz=(high_hz - low_hz) / count,
            reach_s=WIDEST_S,
        )
        if view is None:
            return reading, path
        view = _apart_from(known, view, curve, model)
        arrival_s = curve(view.frequency_hz)
        aligned = align(
            view,
            arrival_s - better.lightning_time_s,
            search_s=PATTERN_SEARCH_S,
            thickness_s=reading.thickness_s,
        )
        kept = aligned.correlation >= LEAST_CORRELATION
        if kept.sum() < LEAST_BANDS:
            return reading, path
        lag_sd_s = aligned.lag_sd_s(view.band_width_hz)
        trace = Trace(view.frequency_hz[kept], (arrival_s + aligned.lag_s)[kept], lag_sd_s[kept])
        snr = view.power.max(axis=1)[kept]
        sharper = TraceReading(trace, snr, reading.thickness_s, aligned.centre_share_sd)
        _, better = _refit(trace, better, model)
    return sharper, better
