"""Whole recordings: the same result however they are stored, cut, sampled or computed."""

from __future__ import annotations

import hashlib
import json
import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile
from makers import RATE_HZ

import whistler.measure
from fieldlines import saturated_density
from whistler.measure import Measurement, measure_recording
from whistler.recording import open_recording
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.synthesis.parts import Mains, Sferics
from whistler.synthesis.render import SyntheticRecording, render
from whistler.synthesis.scene import Scene
from whistler.synthesis.strokes import Path as Duct
from whistler.synthesis.strokes import Stroke

ROOT = Path(__file__).parents[2]
Measure = Callable[..., Measurement]


def duct(l_value: float, hops: tuple[int, ...] = (1,)) -> Duct:
    return Duct(
        l_value,
        round(float(saturated_density(l_value)) * 1e-6, 2),
        snr_db=18.0,
        hops=hops,
        frequency_high_hz=7000.0 if l_value < 3.6 else None,
    )


def scene(rate_hz: int) -> Scene:
    """Two paths of one stroke, then an echo train, in sferics and hum; band to 7 kHz."""
    return Scene(
        duration_s=14.0,
        sample_rate_hz=rate_hz,
        seed=12,
        strokes=(
            Stroke(1.5, (duct(2.5), duct(3.3))),
            Stroke(6.0, (duct(2.8, (1, 3)),)),
        ),
        sferics=(Sferics(rate_hz=10.0),),
        mains=Mains(),
    )


@pytest.fixture(scope="module")
def recording() -> SyntheticRecording:
    return render(scene(32_000))


@pytest.fixture
def measure(tmp_path: Path) -> Measure:
    """Write samples and measure them."""

    def run(
        samples: np.ndarray,
        rate_hz: int = 32_000,
        *,
        subtype: str = "FLOAT",
        channel: int | str = 1,
    ) -> Measurement:
        path = tmp_path / "recording.wav"
        soundfile.write(path, samples, rate_hz, subtype=subtype)
        settings = Settings(channel=channel)
        return measure_recording(open_recording(path, channel=channel), settings)

    return run


@pytest.fixture(scope="module")
def reference(
    recording: SyntheticRecording, tmp_path_factory: pytest.TempPathFactory
) -> Measurement:
    """The recording as it is: four traces."""
    path = tmp_path_factory.mktemp("reference") / "recording.wav"
    soundfile.write(path, recording.samples, 32_000, subtype="FLOAT")
    measurement = measure_recording(open_recording(path))
    assert [row.hops for row in measurement.rows] == [1, 1, 1, 3]
    return measurement


def same_rows(first: Measurement, second: Measurement, *, within: float) -> None:
    """The same events, hops and sferics; L and density within so many sigmas of each other.

    A sferic that is 90 % probable is named in the one and, at 89 %, not in the other: the
    probability is compared, and the time by its own sigma where only one is of a named sferic.
    """
    assert [(row.group, row.hops) for row in first.rows] == [
        (row.group, row.hops) for row in second.rows
    ]
    for one, other in zip(first.rows, second.rows, strict=True):
        assert abs(one.sferic_probability - other.sferic_probability) < 0.1
        assert abs(one.l_value - other.l_value) <= within * one.l_value_sd
        assert abs(one.equatorial_density_cm3 - other.equatorial_density_cm3) <= (
            within * one.equatorial_density_sd_cm3
        )
        apart_s = abs(one.sferic_time_s - other.sferic_time_s)
        sd_s = max(one.sferic_time_sd_s, other.sferic_time_sd_s)
        assert apart_s < (1e-3 if one.sferic_seen == other.sferic_seen else 3 * sd_s)


def test_the_truth_is_among_the_rows(recording: SyntheticRecording, reference: Measurement) -> None:
    """Recovery: L to 2 %, density to 8 %, within 4 sigma: the scale that the others compare on."""
    truths = sorted(
        recording.truth.whistlers, key=lambda item: (item.group, item.hops, item.l_value)
    )
    for row, truth in zip(reference.rows, truths, strict=True):
        assert row.l_value == pytest.approx(truth.l_value, rel=0.02)
        assert row.equatorial_density_cm3 == pytest.approx(truth.equatorial_density_cm3, rel=0.08)
        assert abs(row.l_value - truth.l_value) < 4 * row.l_value_sd
        assert row.uncertainty_status == "ok"


PROGRAM = """
import hashlib, json, sys
from whistler.measure import measure_recording
document = json.loads(measure_recording(sys.argv[1]).to_json())
print(hashlib.sha256(json.dumps(document).encode()).hexdigest())
"""


def test_same_bytes_again_and_with_one_thread_or_two(
    recording: SyntheticRecording, tmp_path: Path
) -> None:
    """Identity: the document has the same bytes in this process, twice, and with 1 or 2 threads."""
    path = tmp_path / "recording.wav"
    soundfile.write(path, recording.samples, 32_000)
    texts = [measure_recording(str(path)).to_json() for _ in range(2)]
    assert texts[0] == texts[1]
    wanted = hashlib.sha256(json.dumps(json.loads(texts[0])).encode()).hexdigest()
    processes = [
        subprocess.Popen(
            [sys.executable, "-c", PROGRAM, str(path)],
            cwd=ROOT,
            env={**os.environ, "NUMBA_NUM_THREADS": threads},
            stdout=subprocess.PIPE,
            text=True,
        )
        for threads in ("1", "2")
    ]
    assert [process.communicate(timeout=120)[0].strip() for process in processes] == [wanted] * 2


def test_gain_and_polarity_do_not_matter(
    recording: SyntheticRecording, reference: Measurement, measure: Measure
) -> None:
    """Identity: powers of two and the sign change no bit of a float; the rows are equal.

    To 1e-6, as levels are compared with fixed small numbers in places.
    """
    for factor in (2.0**-7, -1.0):
        measurement = measure(factor * recording.samples)
        same_rows(reference, measurement, within=1e-3)
        for one, other in zip(reference.rows, measurement.rows, strict=True):
            np.testing.assert_allclose(one.trace.time_s, other.trace.time_s, atol=1e-6)


def test_an_offset_does_not_matter(
    recording: SyntheticRecording, reference: Measurement, measure: Measure
) -> None:
    """Identity: a DC offset a hundred times the noise; its edges ring a little at the ends."""
    same_rows(reference, measure(0.5 * recording.samples + 0.4), within=0.3)


@pytest.mark.parametrize(
    ("subtype", "within"), [("PCM_U8", 2.0), ("PCM_16", 0.2), ("PCM_24", 0.05)]
)
def test_word_length_does_not_matter(
    recording: SyntheticRecording,
    reference: Measurement,
    measure: Measure,
    subtype: str,
    within: float,
) -> None:
    """Identity: the same events; 8 bits add noise of their own, and so move numbers by a sigma."""
    same_rows(reference, measure(recording.samples, subtype=subtype), within=within)


@pytest.mark.parametrize("rate_hz", [16_000, 48_000, 96_000])
def test_sampling_rate_does_not_matter(
    reference: Measurement, measure: Measure, rate_hz: int
) -> None:
    """Recovery: the scene sampled at other rates, so with other noise: L agrees within sigmas.

    Two measurements with independent noise: 3 sigma of each.
    """
    measurement = measure(render(scene(rate_hz)).samples, rate_hz)
    assert [row.hops for row in measurement.rows] == [row.hops for row in reference.rows]
    for one, other in zip(measurement.rows, reference.rows, strict=True):
        assert abs(one.l_value - other.l_value) < 3 * (one.l_value_sd + other.l_value_sd)


def test_a_channel_of_a_stereo_file(
    recording: SyntheticRecording, reference: Measurement, measure: Measure
) -> None:
    """Identity: the second channel is measured as a file of its own would be."""
    noise = 0.1 * np.random.default_rng(1).standard_normal(len(recording.samples))
    both = np.stack([noise, recording.samples], axis=1).astype(np.float32)
    same_rows(reference, measure(both, channel=2), within=1e-3)
    assert measure(both, channel=1).rows == ()


def test_blocks_join_without_a_seam(measure: Measure, monkeypatch: pytest.MonkeyPatch) -> None:
    """Identity: 45 s in three overlapping blocks give the whistlers of one block, none twice.

    Whitening and thresholds are of the block, so numbers may move: by two of their sigmas at most.
    """
    strokes = tuple(
        Stroke(time_s, (duct(l_value),))
        for time_s, l_value in (
            (2.0, 2.5),
            (9.0, 3.1),
            (16.0, 2.7),
            (22.0, 3.4),
            (30.0, 2.4),
            (39.0, 2.9),
        )
    )
    long = replace(scene(32_000), duration_s=45.0, strokes=strokes)
    samples = render(long).samples
    whole = measure(samples)
    assert len(whole.rows) == 6
    assert len(whole.views) == 1
    monkeypatch.setattr(whistler.measure, "BLOCK_S", 21.0)
    monkeypatch.setattr(whistler.measure, "OVERLAP_S", 8.0)
    parts = measure(samples)
    assert len(parts.views) == 3
    same_rows(whole, parts, within=2.0)
    assert len(parts.sferics.time_s) == pytest.approx(len(whole.sferics.time_s), rel=0.1)
    assert np.all(np.diff(parts.sferics.time_s) > 0)
    assert parts.sferics.duration_s == pytest.approx(45.0)


def in_noise(signal: np.ndarray, level: float) -> np.ndarray:
    return signal + level * np.random.default_rng(1).standard_normal(len(signal))


TIME_S = np.arange(20 * 32_000) / 32_000


def swept(start_hz: float, *, span_hz: float, period_s: float) -> np.ndarray:
    return np.sin(2 * np.pi * np.cumsum(start_hz + span_hz * ((TIME_S / period_s) % 1.0)) / 32_000)


def modulated(carrier_hz: float, *, swing_hz: float, rate_hz: float) -> np.ndarray:
    phase = 2 * np.pi * carrier_hz * TIME_S
    return np.sin(phase + swing_hz / rate_hz * np.sin(2 * np.pi * rate_hz * TIME_S))


DECOYS = {
    "1 kHz": np.sin(2 * np.pi * 1000.0 * TIME_S),
    "9 kHz": np.sin(2 * np.pi * 9000.0 * TIME_S),
    "1 kHz on for 5 s": np.sin(2 * np.pi * 1000.0 * TIME_S) * ((TIME_S > 7) & (TIME_S < 12)),
    "falling sweep": swept(6000.0, span_hz=-1800.0, period_s=0.8),
    "slow falling sweep": swept(6000.0, span_hz=-4000.0, period_s=3.0),
    "rising sweep": swept(2500.0, span_hz=1800.0, period_s=1.6),
    "slow FM": modulated(3000.0, swing_hz=1000.0, rate_hz=0.5),
    "fast FM": modulated(3000.0, swing_hz=300.0, rate_hz=30.0),
}


@pytest.mark.parametrize("signal", DECOYS.values(), ids=DECOYS.keys())
@pytest.mark.parametrize("level", [0.0, 0.01])
def test_what_people_make_is_no_whistler(
    measure: Measure, signal: np.ndarray, level: float
) -> None:
    """Recovery: tones and sweeps of 20 s, alone or in noise (0.5 against 0.01), give no row.

    Alone, what is whitened is the rounding of the samples and the edges of the file.
    """
    assert measure(in_noise(0.5 * signal, level)).rows == ()


def test_silence_and_numbers_that_are_none(
    recording: SyntheticRecording, reference: Measurement, measure: Measure
) -> None:
    """Identity: zeros give no rows; gaps of NaN and infinity cost nothing that lies beside them."""
    silent = measure(np.zeros(5 * 32_000))
    assert silent.rows == ()
    assert len(silent.sferics.time_s) == 0
    holed = recording.samples.copy()
    holed[10_000:14_000] = np.nan
    holed[160_000:160_200] = np.inf
    holed[400_000:] = np.nan  # after the last trace
    measurement = measure(holed)
    assert [row.hops for row in measurement.rows] == [row.hops for row in reference.rows]
    for one, other in zip(measurement.rows, reference.rows, strict=True):
        assert abs(one.l_value - other.l_value) < 2 * other.l_value_sd
    assert any(notice.code.startswith("W") for notice in measurement.recording.notices)


def test_long_silence_makes_no_whistlers(recording: SyntheticRecording, measure: Measure) -> None:
    """Identity: with nine times as much silence the same rows, and as certain: none from noise."""
    silence = np.zeros(9 * len(recording.samples), np.float32)
    measurement = measure(np.concatenate([recording.samples, silence]))
    assert [row.hops for row in measurement.rows] == [1, 1, 1, 3]
    assert max(row.significance for row in measurement.rows) < 0.01
    noise = 0.05 * np.random.default_rng(2).standard_normal(10 * 32_000)
    assert measure(np.concatenate([noise, silence])).rows == ()


@pytest.mark.parametrize("seconds", [1.0, 1.5])
@pytest.mark.parametrize("rate_hz", [8000, 192_000])
def test_the_shortest_recordings(measure: Measure, seconds: float, rate_hz: int) -> None:
    """Identity: a second of noise, or of one click, is measured without a warning."""
    noise = 0.05 * np.random.default_rng(3).standard_normal(round(seconds * rate_hz))
    click = np.zeros_like(noise)
    click[100] = 1.0
    for samples in (noise, click):
        assert measure(samples, rate_hz).rows == ()


def test_progress_and_views(recording: SyntheticRecording, tmp_path: Path) -> None:
    """Identity: progress rises to 1; the view shows the block's channels to the band's edge."""
    path = tmp_path / "recording.flac"
    soundfile.write(path, recording.samples, 32_000)
    told: list[float] = []
    measurement = measure_recording(path, progress=told.append)
    assert told == sorted(told)
    assert told[-1] == pytest.approx(1.0)
    (view,) = measurement.views
    assert view.frequency_hz[-1] == pytest.approx(10_000.0, abs=50.0)
    assert view.hop_s == pytest.approx(0.004, rel=0.02)
    assert view.frequency_hz[-1] < 0.9 * RATE_HZ / 2
    row: WhistlerRow = measurement.rows[0]
    assert row.recording == str(path)
    assert row.time is None
