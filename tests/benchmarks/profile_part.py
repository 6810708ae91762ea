"""What statistical and profile sigma cover together where profile and stroke are astray.

    python -m tests.benchmarks.profile_part [--strokes 600]

Ridge picks (`ridge_bound.py`) of one trace of L 2.2 to 4.5 and 10 to 20 dB, with its sferic, drawn
from a model with another density exponent, foF2 and hmF2, the stroke up to 800 km (one-sigma) from
the foot; measured as any stroke, the default model held or fitted; no audio. Drawn from the
declared distributions (exponent 1 +- 0.65, foF2 5 +- 1.5 MHz, hmF2 300 +- 40 km), and evenly from
exponents 0 to 3 and foF2 3 to 9 MHz, which is wider than declared.
"""

from __future__ import annotations

import argparse
import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from fieldlines import (
    CentredDipole,
    ChapmanLayer,
    FieldLineModel,
    saturated_density,
    tube_content,
)
from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from tests.benchmarks.ridge_bound import ridge
from whistler.fit import fit_stroke
from whistler.group import Stroke
from whistler.problem import PathTrace, SfericTime, Ties, sferic_path_s
from whistler.results import Sighting, stroke_rows
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.sferic import READING_SD_S
from whistler.trace import Trace

SEED = 65_001
NAMES = {
    "L": ("l_value", "l_value_sd", "l_value_profile_sd"),
    "density": (
        "equatorial_density_cm3",
        "equatorial_density_sd_cm3",
        "equatorial_density_profile_sd_cm3",
    ),
    "tube content": ("tube_content_m2", "tube_content_sd_m2", "tube_content_profile_sd_m2"),
}
DEFAULT = FieldLineModel(CentredDipole.from_date(2025.0))


class Truth(NamedTuple):
    """Truth and row of one stroke."""

    l_value: float
    density_cm3: float
    content_m2: float
    row: WhistlerRow


def as_declared(generator: np.random.Generator) -> FieldLineModel:
    """A model from the distributions that the settings declare."""
    layer = ChapmanLayer(
        1e6 * float(np.clip(generator.normal(5.0, 1.5), 1.5, 12.0)),
        1e3 * float(np.clip(generator.normal(300.0, 40.0), 200.0, 420.0)),
        60e3,
    )
    exponent = float(np.clip(generator.normal(1.0, 0.65), 0.0, 4.0))
    return FieldLineModel(DEFAULT.dipole, exponent, layer)


def evenly(generator: np.random.Generator) -> FieldLineModel:
    """A model from wider, even distributions of exponent and foF2."""
    layer = ChapmanLayer(1e6 * generator.uniform(3.0, 9.0), 300e3, 60e3)
    return FieldLineModel(DEFAULT.dipole, generator.uniform(0.0, 3.0), layer)


def stroke(
    draw: Callable[[np.random.Generator], FieldLineModel], generator: np.random.Generator
) -> Truth:
    """Draw a stroke and make its row."""
    model = draw(generator)
    l_value = generator.uniform(2.2, 4.5)
    density_m3 = float(saturated_density(l_value)) * 10.0 ** generator.normal(0.0, 0.15)
    top_hz = min(10e3, 0.5 * model.dipole.equatorial_gyrofrequency(l_value))
    trace = ridge(l_value=l_value, density_m3=density_m3, band_hz=(1e3, top_hz), model=model)
    frequency_hz, sd_s = trace.picks(generator.uniform(10.0, 20.0))
    time_s = np.interp(frequency_hz, trace.frequency_hz, trace.time_s)
    time_s += sd_s * generator.standard_normal(len(sd_s))
    astray_s = Settings().stroke_distance_sd_m / SPEED_OF_LIGHT_M_S * generator.standard_normal()
    heard_s = sferic_path_s(l_value) + astray_s + READING_SD_S * generator.standard_normal()
    ties = Ties(SfericTime(heard_s, READING_SD_S, odd_hops=True))
    traces = (PathTrace(Trace(frequency_hz, time_s, sd_s), 1, 0),)
    start = [(l_value, density_m3)]
    fit = fit_stroke(traces, start=start, lightning_time_s=0.0, model=DEFAULT, ties=ties)
    (row,) = stroke_rows(
        Stroke((0,), (1,), traces, fit, ties.sferic, 1.0),
        [Sighting()],
        group=1,
        recording="drawn",
        model=DEFAULT,
        ties=ties,
        settings=Settings(),
    )
    content_m2 = tube_content(l_value, equatorial_density_m3=density_m3, model=model)
    return Truth(l_value, density_m3 / 1e6, content_m2, row)


class Cover(NamedTuple):
    """Of one quantity: median relative sigma and error, coverage of one and 1.96 sigma."""

    sd: float
    error: float
    one: float
    two: float


def covered(strokes: list[Truth]) -> dict[str, Cover]:
    """What the combined sigmas of the rows with status ok cover."""
    sound = [item for item in strokes if item.row.uncertainty_status == "ok"]
    found = {}
    for at, (name, (value, sd, profile_sd)) in enumerate(NAMES.items()):
        truth = np.array([item[at] for item in sound])
        measured = column(sound, value)
        combined = np.hypot(column(sound, sd), column(sound, profile_sd))
        pull = np.abs(measured - truth) / combined
        found[name] = Cover(
            float(np.median(combined / measured)),
            float(np.median(np.abs(measured / truth - 1.0))),
            float(np.mean(pull <= 1.0)),
            float(np.mean(pull <= 1.96)),
        )
    return found


def column(strokes: list[Truth], name: str) -> FloatArray:
    """One column of the rows."""
    return np.array([getattr(item.row, name) for item in strokes])


def main() -> None:
    """Print errors and coverage."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--strokes", type=int, default=600)
    count = parser.parse_args().strokes
    for title, draw in (("as declared", as_declared), ("evenly, wider", evenly)):
        generator = np.random.default_rng(SEED)
        strokes = [stroke(draw, generator) for _ in range(count)]
        for low, high in ((2.2, 3.0), (3.0, 4.5)):
            some = [item for item in strokes if low <= item.l_value < high]
            sound = sum(item.row.uncertainty_status == "ok" for item in some)
            print(f"{title}, L {low:g} to {high:g}: {len(some)} strokes, {sound} ok")
            print(f"    {'':14}sigma    error    within 1    1.96 sigma, per cent")
            for name, cover in covered(some).items():
                cells = "".join(f"{100 * value:9.1f}" for value in cover)
                print(f"    {name:12}{cells}")
                if not math.isfinite(cover.sd):
                    print("    a sigma is missing")


if __name__ == "__main__":
    main()
