"""What fitting the traces of a stroke together gains, beside what theory allows."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from limits_run import Options, Part, shared_out
from promises import Figure, Grid

from fieldlines import CentredDipole, FieldLineModel
from tests.benchmarks.joint_gain import LEAST_SHARE, Gain, cases, measured_gain

AFTER = 9000
JOINT_NOTE = (
    "Ridge picks of known scatter at 10 dB, 1-10 kHz, lightning time unknown, fitted by the "
    "program; no audio (`joint_gain.py`). The gain is the factor by which the sigma of the first "
    "trace shrinks, less one: the geometric mean over L 2.2, 2.5 and 3.0. Shares of it scatter by "
    "some 5 % for trains and 10 to 15 % for three paths."
)


class Draws(NamedTuple):
    """Which case is fitted, how often, from which seed."""

    case: int
    trials: int
    seed: int


def measure_case(draws: Draws) -> Gain:
    """The gain of one case."""
    case = list(cases())[draws.case]
    model = FieldLineModel(CentredDipole.from_date(2025.0))
    generator = np.random.default_rng([draws.seed, draws.case])
    return measured_gain(case, trials=draws.trials, model=model, generator=generator)


def joint(options: Options) -> Part:
    """Shares of the theoretical gain, by the errors made."""
    names = [case.name for case in cases()]
    trials, seed = options.amount(200, quick=40), options.first_seed + AFTER
    draws = [Draws(number, trials, seed) for number in range(len(names))]
    gains = shared_out(measure_case, draws, options, name="joint fits")
    figures = [
        Figure(f"{kind}: share of the gain in {what}, by {by}", 100 * share, low=low)
        for kind, some in by_kind(names, gains).items()
        for by, low, shares in zip(
            ("errors", "stated sigma"), (100 * LEAST_SHARE, -np.inf), mean_shares(some), strict=True
        )
        for what, share in zip(("L", "density"), shares.tolist(), strict=True)
    ]
    rows = tuple(
        (name, *(float(value) for value in gain.factors.ravel()))
        for name, gain in zip(names, gains, strict=True)
    )
    kinds = ("theory", "errors", "stated sigma")
    head = ("stroke", *(f"{kind}, {what}" for kind in kinds for what in ("L", "density")))
    grid = Grid("Factors by which the first trace's sigma shrinks", head, rows)
    return Part("Joint fits", tuple(figures), (grid,), notes=(JOINT_NOTE,))


def by_kind(names: list[str], gains: list[Gain]) -> dict[str, list[Gain]]:
    """Gains of the same kind of stroke at all L together."""
    kinds: dict[str, list[Gain]] = {}
    for name, gain in zip(names, gains, strict=True):
        kinds.setdefault(name.partition(", ")[2], []).append(gain)
    return kinds


def mean_shares(gains: list[Gain]) -> np.ndarray:
    """Share of the theoretical gain of the mean factor: rows error, stated; columns L, density."""
    factors = np.exp(np.mean([np.log(gain.factors) for gain in gains], axis=0))
    return np.asarray((factors[1:] - 1.0) / (factors[0] - 1.0))
