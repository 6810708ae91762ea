"""What fitting the traces of a stroke together gains over fitting one alone, beside theory.

    python -m tests.benchmarks.joint_gain [--trials 200]

Strokes of three paths (L, L + 0.3, L + 0.6), and echo trains of 1, 3 and 5 hops of one path, of the
same energy or each 6 dB less than the one before. Every trace is a row of ridge picks, a matched
cell apart, scattered by what a cell of its strength allows (`ridge_bound.py`): 10 dB, 1 to 10 kHz
or half the equatorial gyrofrequency, the lightning's time unknown. The theory is the Fisher
matrix of all picks, put together here from the travel time's derivatives; the program's share is
the r.m.s. error of `whistler.fit.fit_stroke` over many draws and the sigma it states.

The gain is the factor by which the first trace's sigma shrinks, less one.
"""

from __future__ import annotations

import argparse
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from fieldlines import CentredDipole, FieldLineModel, saturated_density
from fieldlines.errors import FloatArray
from tests.benchmarks.ridge_bound import Ridge, reference_model, ridge
from whistler.fit import StrokeFit, fit_stroke
from whistler.problem import PathTrace
from whistler.trace import Trace

SEED = 50_001
BAND_HZ = (1e3, 10e3)
LEAST_SHARE = 0.7


class Member(NamedTuple):
    """One trace of a stroke; `snr_db` is its cells' strength were its energy that of one hop."""

    l_value: float
    hops: int
    path: int
    snr_db: float


class Cut(NamedTuple):
    """A trace in matched cells, and their mean strength: an echo's energy is in more of them."""

    ridge: Ridge
    snr_db: float

    def picks(self) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Frequency, time, one-sigma and derivatives of the picks."""
        frequency_hz, sd_s = self.ridge.picks(self.snr_db)
        columns = (self.ridge.time_s, *self.ridge.jacobian.T)
        time_s, *slopes = (
            np.interp(frequency_hz, self.ridge.frequency_hz, column) for column in columns
        )
        return frequency_hz, time_s, sd_s, np.column_stack(slopes)


@dataclass(frozen=True)
class Case:
    """A stroke, and the sigmas of its first path worked out elsewhere: alone and joint, L and n."""

    name: str
    members: tuple[Member, ...]
    elsewhere: tuple[float, float, float, float]


def cases() -> Iterator[Case]:
    """The strokes whose bounds were worked out elsewhere, per cent, in a simpler model."""
    table = {
        2.2: ((1.01, 5.4), (0.56, 3.1), (0.07, 0.44), (0.15, 0.93)),
        2.5: ((0.41, 2.0), (0.22, 1.1), (0.03, 0.22), (0.07, 0.45)),
        3.0: ((0.08, 0.26), (0.05, 0.23), (0.01, 0.07), (0.02, 0.15)),
    }
    for l_value, (alone, *joint) in table.items():
        paths = tuple(Member(l_value + 0.3 * k, 1, k, 10.0) for k in range(3))
        equal, fading = (
            tuple(Member(l_value, 1 + 2 * k, 0, 10.0 - step * k) for k in range(3))
            for step in (0.0, 6.0)
        )
        for name, members, bound in zip(
            ("three paths", "1:3:5, equal", "1:3:5, -6 dB each"),
            (paths, equal, fading),
            joint,
            strict=True,
        ):
            yield Case(f"L {l_value:.1f}, {name}", members, (*alone, *bound))


def cut(case: Case, model: FieldLineModel, *, quasi_longitudinal: bool = False) -> list[Cut]:
    """The traces of a stroke cut into matched cells."""
    cuts = []
    for member in case.members:
        half_hz = 0.5 * model.dipole.equatorial_gyrofrequency(member.l_value)
        one, whole = (
            ridge(
                l_value=member.l_value,
                density_m3=float(saturated_density(member.l_value)),
                band_hz=(BAND_HZ[0], min(BAND_HZ[1], half_hz)),
                model=model,
                hops=hops,
                quasi_longitudinal=quasi_longitudinal,
            )
            for hops in (1, member.hops)
        )
        cuts.append(Cut(whole, member.snr_db - 10.0 * np.log10(whole.cells / one.cells)))
    return cuts


def theory(case: Case, cuts: list[Cut]) -> FloatArray:
    """Sigmas of ln L and ln density of the first path, alone and joint, shape (2, 2)."""
    sd = []
    for count in (1, len(cuts)):
        size = 2 * (1 + max(member.path for member in case.members[:count])) + 1
        fisher = np.zeros((size, size))
        for member, trace in zip(case.members[:count], cuts, strict=False):
            _, _, sd_s, slopes = trace.picks()
            row = np.zeros((len(sd_s), size))
            row[:, 2 * member.path : 2 * member.path + 2] = slopes
            row[:, -1] = 1.0
            fisher += (row / sd_s[:, None] ** 2).T @ row
        sd.append(np.sqrt(np.diag(np.linalg.inv(fisher)))[:2])
    return np.array(sd)


def drawn(case: Case, cuts: list[Cut], generator: np.random.Generator) -> list[PathTrace]:
    """Ridge picks of a stroke at time 0, scattered."""
    items = []
    for member, trace in zip(case.members, cuts, strict=True):
        frequency_hz, time_s, sd_s, _ = trace.picks()
        time_s = time_s + sd_s * generator.standard_normal(len(sd_s))
        items.append(PathTrace(Trace(frequency_hz, time_s, sd_s), member.hops, member.path))
    return items


def fitted(case: Case, items: list[PathTrace], model: FieldLineModel) -> StrokeFit:
    """The program's fit, begun a little off."""
    paths = {member.path: member.l_value for member in case.members[: len(items)]}
    start = [(1.02 * value, 0.9 * float(saturated_density(value))) for value in paths.values()]
    return fit_stroke(items, start=start, lightning_time_s=0.0, model=model)


class Gain(NamedTuple):
    """Sigmas of ln L and ln density of the first path, alone and joint, each of shape (2, 2)."""

    theory: FloatArray
    error: FloatArray
    stated: FloatArray

    @property
    def factors(self) -> FloatArray:
        """How many times smaller the joint one is: rows theory, error, stated; L, density."""
        return np.array([sd[0] / sd[1] for sd in self])

    @property
    def shares(self) -> FloatArray:
        """Error's and stated sigma's share of the gain that theory allows, shape (2, 2)."""
        return np.asarray((self.factors[1:] - 1.0) / (self.factors[0] - 1.0))


def measured_gain(
    case: Case, *, trials: int, model: FieldLineModel, generator: np.random.Generator
) -> Gain:
    """Theory, r.m.s. error and median stated sigma of the first path, alone and in the stroke."""
    cuts = cut(case, model)
    first_l = case.members[0].l_value
    truth = np.log([first_l, float(saturated_density(first_l))])
    errors, stated = np.zeros((2, trials, 2, 2))
    for trial in range(trials):
        items = drawn(case, cuts, generator)
        for at, some in enumerate((items[:1], items)):
            fit = fitted(case, some, model)
            errors[trial, at] = np.array([fit.log_l[0], fit.log_density[0]]) - truth
            stated[trial, at] = np.sqrt(np.diag(fit.covariance)[:2])
    return Gain(
        theory(case, cuts),
        np.sqrt(np.mean(errors**2, axis=0)),
        np.median(stated, axis=0),
    )


def main() -> None:
    """Print bounds, errors and gains."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--trials", type=int, default=200)
    trials = parser.parse_args().trials
    model = FieldLineModel(CentredDipole.from_date(2025.0))
    print(f"sigma of L / density of the first path, per cent, 10 dB; {trials} draws each")
    print(f"{'':32}alone           joint           factor        share of gain")
    for number, case in enumerate(cases()):
        generator = np.random.default_rng([SEED, number])
        gain = measured_gain(case, trials=trials, model=model, generator=generator)
        print(case.name)
        elsewhere = 0.01 * np.array(case.elsewhere).reshape(2, 2)
        again = theory(case, cut(case, reference_model(), quasi_longitudinal=True))
        for name, sd, share in zip(
            ("bound worked out elsewhere", "  here", "  default model", "error", "sigma stated"),
            (elsewhere, again, *gain),
            (None, None, None, *gain.shares),
            strict=True,
        ):
            cells = [f"{100 * a:6.3f} / {100 * b:6.3f}" for a, b in sd]
            ratio = sd[0] / sd[1]
            part = "" if share is None else f"{100 * share[0]:5.0f} / {100 * share[1]:3.0f} %"
            print(f"    {name:28}{cells[0]} {cells[1]} {ratio[0]:6.2f} /{ratio[1]:6.2f} {part}")


if __name__ == "__main__":
    main()
