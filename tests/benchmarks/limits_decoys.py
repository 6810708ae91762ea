"""False rows an hour where there is no whistler: drawn decoys, and real audio if given."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from limits_run import Job, Options, Part, measure_all, shared_out
from limits_stats import hourly_figure
from promises import Figure
from scoring import Summary, describe_extra

from whistler.errors import WhistlerError
from whistler.measure import measure_recording
from whistler.rows import WhistlerRow
from whistler.synthesis.draw import draw_decoy_scene
from whistler.synthesis.level import cell_length, noise_level, ridge_power
from whistler.synthesis.render import render_background
from whistler.synthesis.scene import Scene

AFTER = 2000  # seeds after the campaign's first
THUNDER_EVERY = 3  # every third scene has a clipped thunderstorm
SUFFIXES = (".flac", ".wav", ".ogg", ".oga", ".mp3", ".aiff", ".w64")
NOT_MEASURED = "Real recordings without whistlers: not measured (no `--recordings`)."
LEAST_DB = 1.0  # parts of a scene that add less than this along a row did not make it


def decoy_scene(seed: int) -> Scene:
    """The decoys of one seed: every kind at once, thunder in every third scene."""
    return draw_decoy_scene(
        np.random.default_rng(seed), name=f"decoy{seed}", thunder=seed % THUNDER_EVERY == 0
    )


def decoys(options: Options) -> Part:
    """False rows an hour in decoys, with what each one was."""
    begin = options.first_seed + AFTER
    jobs = [
        Job(seed, decoy_scene(seed)) for seed in range(begin, begin + options.amount(60, quick=8))
    ]
    scored = measure_all(jobs, options, name="decoys")
    summary = Summary.of(scored)
    figures = [
        Figure("decoys measured", summary.minutes, unit="min"),
        *contents([job.scene for job in jobs]),
        hourly_figure("false rows", len(summary.extra), summary.minutes, high=1.0),
    ]
    notes = () if options.recordings is not None else (NOT_MEASURED,)
    oddities = [
        f"{describe_extra(row)}; over the noise along it: {causes(job.scene, row)}"
        for job, one in zip(jobs, scored, strict=True)
        for row in one.extra
    ]
    if options.recordings is not None:
        more, lines = real(options.recordings, options)
        figures += more
        oddities += lines
    return Part("Decoys", tuple(figures), notes=notes, oddities=tuple(oddities))


def contents(scenes: list[Scene]) -> list[Figure]:
    """How many scenes hold each kind of decoy."""
    keyings = [transmitter.keying for scene in scenes for transmitter in scene.transmitters]
    counts = {
        "chorus risers and fallers": sum(bool(scene.chorus) for scene in scenes),
        "a hiss band": sum(bool(scene.hiss) for scene in scenes),
        "a tweek storm": sum(len(scene.sferics) > 1 for scene in scenes),
        "mains steps": sum(
            scene.mains is not None and scene.mains.steps_per_minute > 0.5 for scene in scenes
        ),
        "clipped thunder": sum(scene.receiver.full_scale is not None for scene in scenes),
        "a swept transmitter": keyings.count("swept"),
        "a keyed or steady transmitter": len(keyings) - keyings.count("swept"),
    }
    return [Figure(f"scenes with {name}", count, unit="") for name, count in counts.items()]


def causes(scene: Scene, row: WhistlerRow) -> str:
    """What parts of a scene add along the trace of a row, strongest first.

    Every kind of part has its own stream of draws, so that each can be rendered alone, with nothing
    but the noise, just as it is in the whole.
    """
    bare = replace(scene, sferics=(), mains=None, hiss=(), chorus=(), transmitters=())
    alone = {
        "chorus": replace(bare, chorus=scene.chorus),
        "hiss": replace(bare, hiss=scene.hiss),
        "transmitter": replace(bare, transmitters=scene.transmitters),
        "mains": replace(bare, mains=scene.mains),
        "sferics": replace(bare, sferics=scene.sferics[:1]),
        "sferics and tweeks": replace(bare, sferics=scene.sferics[:2]),
        "sferics, tweeks and thunder": replace(bare, sferics=scene.sferics),
    }
    reference_db = _along(bare, row)
    added = {name: _along(one, row) - reference_db for name, one in alone.items()}
    strongest = sorted(added, key=lambda name: -added[name])
    named = [f"{name} {added[name]:.0f} dB" for name in strongest if added[name] >= LEAST_DB]
    return ", ".join(named) or "nothing"


def _along(scene: Scene, row: WhistlerRow) -> float:
    """Median over a row's points of power over the scene's noise, dB."""
    rate_hz = float(scene.sample_rate_hz)
    samples = render_background(scene, np.random.default_rng(scene.seed).spawn(1)[0]).samples
    power = ridge_power(
        samples,
        arrival_s=row.trace.time_s,
        frequency_hz=row.trace.frequency_hz,
        sample_rate_hz=rate_hz,
    )
    quiet = replace(scene, sferics=(), mains=None, hiss=(), chorus=(), transmitters=())
    noise = noise_level(
        render_background(quiet, np.random.default_rng(scene.seed).spawn(1)[0]).samples,
        sample_rate_hz=rate_hz,
    )
    channel = np.round(row.trace.frequency_hz * cell_length(rate_hz) / rate_hz).astype(int)
    return float(10.0 * np.log10(np.median(power / noise.power[channel])))


@dataclass(frozen=True)
class Heard:
    """Rows of one real recording, or why it could not be measured."""

    name: str
    minutes: float
    rows: tuple[WhistlerRow, ...]
    trouble: str = ""


def measure_file(path: Path) -> Heard:
    """Rows of a recording on disk."""
    try:
        measurement = measure_recording(path)
    except WhistlerError as error:
        return Heard(path.name, 0.0, (), str(error))
    return Heard(path.name, measurement.recording.duration_s / 60.0, measurement.rows)


def real(folder: Path, options: Options) -> tuple[list[Figure], list[str]]:
    """Rows in real audio that is known to hold no whistlers."""
    paths = sorted(path for path in folder.rglob("*") if path.suffix.lower() in SUFFIXES)
    heard = shared_out(measure_file, paths, options, name="real recordings")
    minutes = sum(one.minutes for one in heard)
    rows = [row for one in heard for row in one.rows]
    usable = sum(not one.trouble for one in heard)
    figures = [
        Figure("real recordings without whistlers", usable, low=1, unit=""),
        Figure("audio in them", minutes, unit="min"),
        Figure("rows in them", len(rows) if usable else math.nan, high=0, unit=""),
    ]
    lines = [f"{one.name}: {one.trouble}" for one in heard if one.trouble]
    return figures, [*lines, *map(describe_extra, rows)]
