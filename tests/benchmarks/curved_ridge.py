"""Coverage of the delivered intervals where the ridge of L and density bends.

    python -m tests.benchmarks.curved_ridge [--trials 4000]

Points drawn straight from the model at L 1.9 to 2.6, in narrow bands and with much noise, one trace
in three with the lightning's time known to 0.5 ms; no audio. A trace's stated sigma is off by 20 %,
one-sigma, as one that is itself measured is. Rows whose status is `ok` are counted: how often the
interval of 95 % holds the truth, how often it lies above and below, and the same for the interval
that the covariance alone would give.
"""

from __future__ import annotations

import argparse
from typing import NamedTuple

import numpy as np

from fieldlines import CentredDipole, FieldLineModel, saturated_density, travel_time
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit, fit_stroke
from whistler.group import Stroke
from whistler.problem import FREE, PathTrace, Ties
from whistler.results import Sighting, stroke_rows
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.trace import Trace

SEED = 60_001
POINTS = 25
TIME_SD_S = 5e-4
WRONG = 0.2
SIGMAS = 1.96
L_KEYS = ("L", "l_value", "l_value_low", "l_value_high")
DENSITY_KEYS = (
    "density",
    "equatorial_density_cm3",
    "equatorial_density_low_cm3",
    "equatorial_density_high_cm3",
)
SETTINGS = Settings(l_range=(1.3, 7.5), density_prior="none")


class Trial(NamedTuple):
    """A fitted trace: its truth (density per cm^3), its fit, its row."""

    log_l: float
    log_density: float
    fit: StrokeFit
    row: WhistlerRow

    @property
    def curved(self) -> bool:
        """Whether the row's intervals are from the profile likelihood."""
        return "curved-ridge" in self.row.flags


def trial(model: FieldLineModel, generator: np.random.Generator) -> Trial:
    """Draw one trace and fit it."""
    l_value = generator.uniform(1.9, 2.6)
    density_m3 = float(saturated_density(l_value)) * 10.0 ** generator.normal(0.0, 0.15)
    frequency_hz = np.linspace(generator.uniform(1e3, 2.5e3), generator.uniform(4.5e3, 8e3), POINTS)
    sd_s = 10.0 ** generator.uniform(-3.7, -2.5)
    time_s = travel_time(
        frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )
    time_s = time_s + sd_s * generator.standard_normal(POINTS)
    stated_s = sd_s * np.exp(WRONG * generator.standard_normal())
    ties = FREE
    if generator.random() < 1.0 / 3.0:
        ties = Ties(lightning_time_s=(TIME_SD_S * generator.standard_normal(), TIME_SD_S))
    traces = (PathTrace(Trace(frequency_hz, time_s, np.full(POINTS, stated_s)), 1, 0),)
    start = [(l_value, density_m3)]
    fit = fit_stroke(traces, start=start, lightning_time_s=0.0, model=model, ties=ties)
    (row,) = stroke_rows(
        Stroke((0,), (1,), traces, fit, None, 0.0),
        [Sighting()],
        group=1,
        recording="drawn",
        model=model,
        ties=ties,
        settings=SETTINGS,
    )
    return Trial(float(np.log(l_value)), float(np.log(density_m3 / 1e6)), fit, row)


class Counts(NamedTuple):
    """Shares of rows whose truth lies within, below and above an interval of 95 %."""

    rows: int
    inside: float
    below: float
    above: float


def counted(truth: FloatArray, low: FloatArray, high: FloatArray) -> Counts:
    """Count; an end that is missing is out of reach."""
    below = truth < np.where(np.isnan(low), -np.inf, low)
    above = truth > np.where(np.isnan(high), np.inf, high)
    inside = float(np.mean(~below & ~above))
    return Counts(len(truth), inside, float(below.mean()), float(above.mean()))


def compared(trials: list[Trial]) -> dict[str, tuple[Counts, Counts]]:
    """Delivered intervals and those of the covariance, of L and of density."""
    found = {}
    for at, (name, *keys) in enumerate((L_KEYS, DENSITY_KEYS)):
        truth = np.array([item[at] for item in trials])
        best, low, high = (np.log([getattr(item.row, key) for item in trials]) for key in keys)
        reach = np.array([SIGMAS * np.sqrt(item.fit.covariance[at, at]) for item in trials])
        found[name] = (counted(truth, low, high), counted(truth, best - reach, best + reach))
    return found


def main() -> None:
    """Print coverage."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--trials", type=int, default=4000)
    generator = np.random.default_rng(SEED)
    model = FieldLineModel(CentredDipole.from_date(2025.0))
    done = [trial(model, generator) for _ in range(parser.parse_args().trials)]
    sound = [item for item in done if item.row.uncertainty_status == "ok"]
    curved = [item for item in sound if item.curved]
    wide = [item for item in curved if item.fit.covariance[0, 0] > 0.03**2]
    print(f"{len(done)} traces, {len(sound)} ok, {len(curved)} with a curved ridge")
    print(f"{'':34}rows   within   truth below   above, per cent")
    for title, some in (
        ("all ok", sound),
        ("curved ridge", curved),
        ("curved, sigma of ln L over 0.03", wide),
    ):
        for name, pair in compared(some).items():
            for kind, counts in zip(("delivered", "covariance"), pair, strict=True):
                shown = "".join(f"{100 * value:10.1f}" for value in counts[1:])
                print(f"{title:32}{counts.rows:6d}{shown}   {name}, {kind}")


if __name__ == "__main__":
    main()
