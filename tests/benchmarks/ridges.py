"""Ridges of spectrograms beside sub-band timing: what each costs in time and in L.

    python -m tests.benchmarks.ridges [--whistlers 40]

Every way of getting points sees the same cleaned audio and the same rough curve, drawn within 40 ms
of the truth over the whole band; ridges are looked for within 60 ms of it, and all fits begin at
its L and density, with the time free. A whistler without a fit counts as an infinite error of L.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from itertools import product

import librosa
import numpy as np

from fieldlines import saturated_density
from fieldlines.errors import FloatArray
from whistler.cleaning import CleanAudio, clean
from whistler.discovery import THIN
from whistler.fit import fit_stroke
from whistler.follow import OneHop, follow
from whistler.problem import PathTrace
from whistler.recording import AudioBlock
from whistler.search import Candidate, reference_delay_s
from whistler.settings import Settings
from whistler.spectrogram import Spectrogram, spectrogram
from whistler.synthesis.parts import Sferics
from whistler.synthesis.render import render
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Path, Stroke
from whistler.synthesis.truth import WhistlerTruth
from whistler.trace import LEAST_SNR, TIMING_FACTOR, Trace, peak_offset

SEED = 62_000  # thresholds and STEP_WIDTH were chosen at others
STRENGTHS_DB = (0.0, 5.0, 10.0, 20.0)
THICKNESS_S = (0.001, 0.004)
L_RANGE = (2.4, 4.2)
SCENE = Scene(duration_s=7.0, sample_rate_hz=24_000, seed=SEED, sferics=(Sferics(rate_hz=20.0),))
MODEL = SCENE.medium.field_line_model()
CORRIDOR_S = 0.06
ROUGH_S = 0.04  # largest distance of the rough curve from the truth
FAR_S = 0.01
TYPICAL_SNR = 5.0  # of a ridge cell, for the likelihood that Viterbi tracking goes by
STEP_WIDTH = 3  # cells within which a ridge goes on in the next channel, less the rough curve
FEWEST_POINTS = 5  # as the following asks for
NORMAL = 1.4826  # standard deviation over median |x| of a normal distribution


def within(frequency_hz: FloatArray, truth: WhistlerTruth) -> np.ndarray:
    """Whether frequencies lie in the whistler's band."""
    return (frequency_hz >= truth.frequency_low_hz) & (frequency_hz <= truth.frequency_high_hz)


@dataclass(frozen=True)
class Case:
    """One cleaned recording with its whistler, and what is roughly known of that."""

    audio: CleanAudio
    view: Spectrogram
    truth: WhistlerTruth
    rough: OneHop

    def true_s(self, frequency_hz: FloatArray) -> FloatArray:
        """Arrival by the phase that was rendered."""
        return np.interp(frequency_hz, self.truth.trace.frequency_hz, self.truth.trace.time_s)

    def rough_s(self, frequency_hz: FloatArray) -> FloatArray:
        """Arrival by the rough curve."""
        return self.rough.curve(MODEL)(frequency_hz)

    @property
    def channels(self) -> np.ndarray:
        """Channels of the spectrogram inside the whistler's band."""
        return np.flatnonzero(within(self.view.frequency_hz, self.truth))


def make_case(seed: int, *, strength_db: float, thickness_s: float) -> Case:
    """Render and clean one whistler; a seed is the same duct and noise at every strength."""
    generator = np.random.default_rng([SEED, seed])
    l_value = generator.uniform(*L_RANGE)
    density_m3 = float(saturated_density(l_value)) * 10.0 ** generator.normal(0.0, 0.15)
    path = Path(l_value, density_m3 / 1e6, snr_db=strength_db, spread_s=thickness_s)
    heard = render(replace(SCENE, seed=SEED + seed, strokes=(Stroke(1.5, (path,)),)))
    (truth,) = heard.truth.whistlers
    usable = np.ones(len(heard.samples), bool)
    audio = clean(AudioBlock(0, heard.samples, usable, heard.sample_rate_hz), settings=Settings())
    return Case(audio, spectrogram(audio), truth, rough_path(truth, generator))


def rough_path(truth: WhistlerTruth, generator: np.random.Generator) -> OneHop:
    """Draw a curve near the true one, as a search gives it."""
    inside = np.flatnonzero(within(truth.trace.frequency_hz, truth))[::8]
    frequency_hz, wanted_s = truth.trace.frequency_hz[inside], truth.trace.time_s[inside]
    while True:
        l_value = truth.l_value * np.exp(generator.normal(0.0, 0.04))
        density_m3 = truth.equatorial_density_cm3 * 1e6 * np.exp(generator.normal(0.0, 0.2))
        delay_s = OneHop(l_value, density_m3, 0.0).curve(MODEL)(frequency_hz)
        time_s = float(np.median(wanted_s - delay_s)) + generator.normal(0.0, 0.01)
        if np.abs(time_s + delay_s - wanted_s).max() < ROUGH_S:
            return OneHop(l_value, density_m3, time_s)


@dataclass(frozen=True)
class Corridor:
    """Power of the cells along the rough curve: a row for each channel, a column for each lag."""

    case: Case
    frequency_hz: FloatArray
    first_frame: np.ndarray
    power: FloatArray

    @classmethod
    def of(cls, case: Case) -> Corridor:
        """Cut the corridor out of the spectrogram."""
        view, channels = case.view, case.channels
        frequency_hz = view.frequency_hz[channels]
        middle = np.rint((case.rough_s(frequency_hz) - view.start_s) / view.hop_s).astype(int)
        reach = round(CORRIDOR_S / view.hop_s)
        frames = middle[:, None] + np.arange(-reach, reach + 1)
        power = view.power[channels[:, None], frames].astype(float)
        return cls(case, frequency_hz, frames[:, 0], power)

    def likeliest(self) -> np.ndarray:
        """Columns of the likeliest way through all rows."""
        # A cell of noise is exponential with mean 1, one on the ridge with mean 1 + TYPICAL_SNR.
        log_ratio = self.power * TYPICAL_SNR / (1.0 + TYPICAL_SNR)
        likelihood = np.exp(log_ratio - log_ratio.max(axis=1, keepdims=True))
        states = self.power.shape[1]
        moves = librosa.sequence.transition_local(states, STEP_WIDTH, window="triangle")
        return librosa.sequence.viterbi(likelihood.T, moves).astype(int)

    def picked(self, at: np.ndarray, *, least: float, moved: bool) -> PathTrace:
        """Points in the cells of at least that power, where they are or as reassigned."""
        strength, view = self.power[np.arange(len(at)), at], self.case.view
        offset = np.clip(peak_offset(self.power, at), -0.5, 0.5)  # Viterbi's need not be tops
        time_s = view.start_s + (self.first_frame + at + offset) * view.hop_s
        frequency_hz, time_s = self.reassigned(at) if moved else (self.frequency_hz, time_s)
        kept = (strength >= least) & (np.abs(time_s - self.case.rough_s(frequency_hz)) < CORRIDOR_S)
        trace = Trace(frequency_hz, time_s, self.sd_s(strength)).only(kept)
        return PathTrace(trace.only(np.argsort(trace.frequency_hz)), 1, 0)

    def reassigned(self, at: np.ndarray) -> tuple[FloatArray, FloatArray]:
        """Frequencies and times that reassignment moves the cells to."""
        audio, view = self.case.audio, self.case.view
        size, hop = (round(part * audio.sample_rate_hz) for part in (view.window_s, view.hop_s))
        with warnings.catch_warnings():  # librosa 0.11 under numpy 2.4
            warnings.filterwarnings("ignore", message="'where' used without 'out'")
            frequency_hz, time_s, _ = librosa.reassigned_spectrogram(
                audio.samples, sr=audio.sample_rate_hz, n_fft=size, hop_length=hop, center=False
            )
        cell = (np.rint(self.frequency_hz * view.window_s).astype(int), self.first_frame + at)
        return frequency_hz[cell], audio.start_s + time_s[cell]

    def sd_s(self, strength: FloatArray) -> FloatArray:
        """One-sigma of a point: the ridge is as wide in time as window and channel make it."""
        window_s = self.case.view.window_s
        slope = np.gradient(self.case.rough_s(self.frequency_hz), self.frequency_hz)
        width_s = np.hypot(0.5 * window_s, slope * 1.5 / window_s)
        return TIMING_FACTOR * width_s / np.sqrt(2.0 * np.maximum(strength - 1.0, 0.5))


def ridge(case: Case, *, tracked: bool = False, moved: bool = False) -> PathTrace:
    """Strongest cell of each channel in the corridor, or the cells of the likeliest way."""
    corridor = Corridor.of(case)
    at = corridor.likeliest() if tracked else np.argmax(corridor.power, axis=1)
    least = 0.5 * LEAST_SNR if tracked else LEAST_SNR  # tracked: other cells lead to weak ones
    return corridor.picked(at, least=least, moved=moved)


def rough(case: Case) -> PathTrace:
    """The rough curve itself, which the others start from."""
    frequency_hz = case.view.frequency_hz[case.channels]
    sd_s = np.full(len(frequency_hz), FAR_S)
    return PathTrace(Trace(frequency_hz, case.rough_s(frequency_hz), sd_s), 1, 0)


def sub_bands(case: Case) -> PathTrace | None:
    """This project's way: de-disperse with the curve, time the sub-bands on their pattern."""
    curve = rough(case).trace
    band_hz = (case.truth.frequency_low_hz, case.truth.frequency_high_hz)
    candidate = Candidate(
        time_s=reference_delay_s(curve.frequency_hz, curve.time_s), band_hz=band_hz,
        l_value=case.rough.l_value, density_m3=case.rough.density_m3,
        strength=0.0, false_alarms_per_hour=0.0, thickness_s=0.0,  # not looked at by the following
        frequency_hz=curve.frequency_hz, curve_s=curve.time_s,
    )  # fmt: skip
    found = follow(
        candidate, case.audio, spectrogram=case.view, model=MODEL, windows_s=THIN.windows_s
    )
    reading = found and found.reading
    return reading and PathTrace(reading.trace, 1, 0, reading.centre_share_sd)


WAYS: dict[str, Callable[[Case], PathTrace | None]] = {
    "ridge": ridge,
    "reassigned": partial(ridge, moved=True),
    "Viterbi": partial(ridge, tracked=True),
    "both": partial(ridge, tracked=True, moved=True),
    "sub-bands": sub_bands,
}


def errors(case: Case, item: PathTrace | None) -> tuple[FloatArray, float]:
    """Timing errors of the points, s, and the relative error of L with the time free."""
    if item is None or len(item.trace.time_s) < FEWEST_POINTS:
        return np.empty(0), np.inf
    start = [(case.rough.l_value, case.rough.density_m3)]
    fit = fit_stroke([item], start=start, lightning_time_s=case.rough.lightning_time_s, model=MODEL)
    l_error = abs(fit.start[0][0] / case.truth.l_value - 1.0)
    return item.trace.time_s - case.true_s(item.trace.frequency_hz), l_error


def robust_rms(error: FloatArray) -> float:
    """Standard deviation of the normal distribution with this median of |error|."""
    return NORMAL * float(np.quantile(np.abs(error), 0.5, method="lower")) if len(error) else np.inf


def cell(pairs: list[tuple[FloatArray, float]]) -> str:
    """Timing and L of all whistlers as the table shows them."""
    error_s = np.concatenate([pair[0] for pair in pairs])
    l_error = np.array([pair[1] for pair in pairs])
    far = 100.0 * np.mean(np.abs(error_s) > FAR_S) if len(error_s) else np.nan
    unfit = f" ({np.isinf(l_error).sum()} unfit)" if np.isinf(l_error).any() else ""
    return f"{1e3 * robust_rms(error_s):.2g} / {far:.0f} / {100 * robust_rms(l_error):.2g}{unfit}"


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--whistlers", type=int, default=40, help="for each line of the table")
    seeds = range(parser.parse_args().whistlers)
    print("Robust rms timing error, ms / points more than 10 ms off, % / robust error of L, %\n")
    print(f"| strength, thickness | {' | '.join(WAYS)} |\n{'|---' * (1 + len(WAYS))}|")
    for strength_db, thickness_s in product(STRENGTHS_DB, THICKNESS_S):
        kind = {"strength_db": strength_db, "thickness_s": thickness_s}
        cases = [make_case(seed, **kind) for seed in seeds]
        cells = [cell([errors(case, way(case)) for case in cases]) for way in WAYS.values()]
        print(f"| {strength_db:g} dB, {1e3 * thickness_s:g} ms | {' | '.join(cells)} |")
    print("\nThe rough curves themselves:", cell([errors(case, rough(case)) for case in cases]))


if __name__ == "__main__":
    main()
