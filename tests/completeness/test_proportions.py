"""Intervals of shares and rates, and the strength at which a share is reached."""

from __future__ import annotations

import math

import numpy as np
import pytest

from whistler.proportions import binned, binomial_interval, poisson_interval, strength_at


@pytest.mark.parametrize(
    ("hits", "tried", "low", "high"),
    [
        (81, 263, 0.2527, 0.3676),
        (15, 148, 0.0578, 0.1617),
        (0, 20, 0.0, 0.1684),
        (1, 29, 0.0009, 0.1776),
    ],
)
def test_binomial_interval(hits: int, tried: int, low: float, high: float) -> None:
    """Reference: the worked examples of Newcombe 1998, Statistics in Medicine 17, table I,
    Clopper-Pearson (from memory); they are printed to four decimals."""
    found = binomial_interval(hits, tried)
    assert found.low == pytest.approx(low, abs=6e-5)
    assert found.high == pytest.approx(high, abs=6e-5)


@pytest.mark.parametrize(("hits", "tried"), [(3, 7), (40, 41), (5, 200)])
def test_binomial_interval_leaves_tails_of_a_fortieth(hits: int, tried: int) -> None:
    """Identity: at either end the count seen, or one farther out, has probability 0.025, by
    summing the binomial law. Tolerance: rounding of the sums."""

    def at_least(count: int, share: float) -> float:
        return sum(
            math.comb(tried, k) * share**k * (1.0 - share) ** (tried - k)
            for k in range(count, tried + 1)
        )

    found = binomial_interval(hits, tried)
    assert at_least(hits, found.low) == pytest.approx(0.025, rel=1e-6)
    assert 1.0 - at_least(hits + 1, found.high) == pytest.approx(0.025, rel=1e-6)


@pytest.mark.parametrize(
    ("count", "low", "high"), [(0, 0.0, 3.689), (1, 0.0253, 5.572), (5, 1.623, 11.668)]
)
def test_poisson_interval(count: int, low: float, high: float) -> None:
    """Reference: Garwood's table of exact Poisson limits (from memory), to the digits printed."""
    found = poisson_interval(count)
    assert found.low == pytest.approx(low, abs=6e-4)
    assert found.high == pytest.approx(high, abs=6e-4)


def test_nothing_tried_says_nothing() -> None:
    assert (binomial_interval(0, 0).low, binomial_interval(0, 0).high) == (0.0, 1.0)
    (empty,) = binned([], [], edges=[0.0, 1.0])
    assert math.isnan(empty.share)
    for empty_or_one in ([], [3.0]):
        found = strength_at(
            0.5, strength_db=empty_or_one, hits=[True] * len(empty_or_one), range_db=(-3.0, 12.0)
        )
        assert math.isnan(found.strength_db)
        assert found.reached is None


def test_bins_hold_everything_once() -> None:
    """Identity: counts add up; a value on an edge belongs to the bin above, the last edge to the
    last bin."""
    bins = binned([0.0, 1.0, 1.5, 2.0], [True, True, False, True], edges=[0.0, 1.0, 2.0])
    assert [(item.tried, item.hits) for item in bins] == [(1, 1), (3, 2)]


def found_of(
    strength_db: np.ndarray, *, middle_db: float, top: float, generator: np.random.Generator
) -> np.ndarray:
    chance = top / (1.0 + np.exp(-(strength_db - middle_db)))
    return generator.random(strength_db.size) < chance


def test_strength_at_is_recovered_within_its_interval() -> None:
    """Recovery: 40 runs of 300 whistlers on a logistic curve of width 1 dB and top 0.97. The 95 %
    intervals hold the truth in at least 34 (four of a thousand such series hold fewer)."""
    generator = np.random.default_rng(5)
    truth = {share: 2.0 + math.log(share / (0.97 - share)) for share in (0.5, 0.9)}
    inside, errors = dict.fromkeys(truth, 0), []
    for _ in range(40):
        strength = generator.uniform(-3.0, 12.0, 300)
        hits = found_of(strength, middle_db=2.0, top=0.97, generator=generator)
        for share, at in truth.items():
            found = strength_at(share, strength_db=strength, hits=hits)
            low, high = found.interval_db.low, found.interval_db.high
            inside[share] += not (at < low or at > high)
            errors.append(found.strength_db - at)
    assert min(inside.values()) >= 34
    assert abs(float(np.nanmean(errors))) < 0.15  # its own scatter: 0.4 dB over sqrt(80)


def test_a_share_that_is_not_reached_is_not_invented() -> None:
    """Recovery: with a top of 0.8, or everything, or nothing found, there is no such strength."""
    generator = np.random.default_rng(6)
    strength = generator.uniform(-3.0, 12.0, 400)
    hits = found_of(strength, middle_db=1.0, top=0.8, generator=generator)
    nowhere = strength_at(0.9, strength_db=strength, hits=hits)
    assert math.isnan(nowhere.strength_db)
    assert nowhere.reached == "above"
    half = strength_at(0.5, strength_db=strength, hits=hits)
    assert half.strength_db == pytest.approx(1.0 + math.log(0.5 / 0.3), abs=0.6)
    assert half.reached == "within"
    for all_or_none, where in ((True, "below"), (False, "above")):
        hits = np.full(strength.size, all_or_none)
        found = strength_at(0.5, strength_db=strength, hits=hits)
        assert math.isnan(found.strength_db)
        assert found.reached == where


def test_all_found_of_a_few_lies_below_what_was_tried() -> None:
    """Recovery: 24 of 24 found from 6 to 15 dB. Half is found below that: it would have a chance
    of 6e-8 were half found there; nine tenths had one of 0.08, which tells nothing."""
    strength = np.linspace(6.0, 15.0, 24)
    found = {
        share: strength_at(share, strength_db=strength, hits=np.full(24, True))
        for share in (0.5, 0.9)
    }
    assert found[0.5].reached == "below"
    assert math.isnan(found[0.5].strength_db)
    assert found[0.9].reached is None
