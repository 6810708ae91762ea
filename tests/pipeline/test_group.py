"""Traces to strokes: who belongs together, over how many hops, from which sferic."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from makers import model_trace

from fieldlines import FieldLineModel, saturated_density
from whistler.evidence import _density_departure
from whistler.fit import StrokeFit, fit_stroke
from whistler.group import FoundTrace, Stroke, _apart, _likeliest_order, group_strokes
from whistler.problem import PathTrace, sferic_path_s
from whistler.scatter import ModelScatter
from whistler.settings import Settings
from whistler.sferic import SfericCatalogue, front_lag_s

QUIET = SfericCatalogue(np.empty(0), np.empty(0), 60.0)


def climatology_m3(l_value: float) -> float:
    return float(saturated_density(l_value))


def found(
    model: FieldLineModel,
    l_value: float,
    hops: int,
    *,
    time_s: float,
    factor: float = 1.0,
    seed: int = 1,
) -> FoundTrace:
    """A trace with 0.3 ms of noise, guessed at as one hop of more density, as the search does."""
    density_m3 = factor * climatology_m3(l_value)
    top_hz = min(9000.0, 0.5 * model.dipole.equatorial_gyrofrequency(l_value))
    trace = model_trace(
        model,
        l_value=l_value,
        density_m3=density_m3,
        band_hz=(1500.0, top_hz),
        count=14,
        sd_s=3e-4,
        hops=hops,
        lightning_time_s=time_s,
        generator=np.random.default_rng([seed, hops, round(100 * l_value)]),
    )
    return FoundTrace(trace, l_value, density_m3 * hops**2, time_s)


def sferics(heard_s: list[float], *, rate_hz: float, seed: int = 1) -> SfericCatalogue:
    """A minute of Poisson sferics with some more at given times, all equally strong."""
    generator = np.random.default_rng(seed)
    time_s = generator.uniform(0.0, 60.0, generator.poisson(60.0 * rate_hz))
    time_s = np.sort(np.append(time_s, heard_s))
    return SfericCatalogue(time_s, np.exp(generator.normal(2.5, 0.7, time_s.size)), 60.0)


def heard_s(lightning_time_s: float, l_values: list[float]) -> float:
    """When the front of a conjugate stroke's sferic is read."""
    way_s = sferic_path_s(np.array(l_values))
    return lightning_time_s + way_s + front_lag_s(way_s, front_hz=11_000.0)


@pytest.fixture
def group(model: FieldLineModel, settings: Settings):  # type: ignore[no-untyped-def]
    def run(items: list[FoundTrace], seen: SfericCatalogue) -> list[Stroke]:
        return group_strokes(items, seen, model=model, settings=settings)

    return run


def partition(strokes: list[Stroke]) -> list[list[int]]:
    return sorted(sorted(stroke.members) for stroke in strokes)


def test_paths_of_one_stroke_join(model, group) -> None:
    """Recovery: three paths whose sferic is heard, among 5 a second; the sferic is named."""
    l_values = [2.4, 2.9, 3.6]
    items = [found(model, l_value, 1, time_s=30.0) for l_value in l_values]
    seen = sferics([heard_s(30.0, l_values)], rate_hz=5.0)
    (stroke,) = group(items, seen)
    assert sorted(stroke.members) == [0, 1, 2]
    assert stroke.hops == (1, 1, 1)
    assert stroke.sferic is not None
    assert stroke.sferic.time_s == pytest.approx(30.0 + sferic_path_s(np.array(l_values)), abs=5e-4)
    assert stroke.fit.lightning_time_s == pytest.approx(30.0, abs=5e-4)
    truth = [np.log(l_values[k]) for k in stroke.members]
    np.testing.assert_allclose(stroke.fit.log_l, truth, atol=0.01)


def test_paths_of_one_stroke_join_without_a_sferic(model, group) -> None:
    """Recovery: their times agree to a fraction of a ms where the nose is in the band."""
    items = [found(model, l_value, 1, time_s=30.0) for l_value in (3.3, 3.9)]
    (stroke,) = group(items, QUIET)
    assert stroke.sferic is None
    assert stroke.sferic_probability == 0.0
    assert stroke.fit.lightning_time_s == pytest.approx(30.0, abs=2e-3)


def test_paths_join_where_the_profile_is_another(model: FieldLineModel, group) -> None:
    """Recovery: traces of exponent 2 and foF2 7 MHz, for which the default model's times of the two
    paths differ by tens of ms, are of one stroke, and its time is within 15 ms (sigma some 7)."""
    layer = model.layer
    assert layer is not None
    other = replace(model, density_exponent=2.0, layer=replace(layer, critical_frequency_hz=7e6))
    items = [found(other, l_value, 1, time_s=30.0) for l_value in (3.3, 4.1)]
    (stroke,) = group(items, QUIET)
    assert stroke.hops == (1, 1)
    assert stroke.fit.lightning_time_s == pytest.approx(30.0, abs=0.015)
    exponent = stroke.fit.model.density_exponent
    assert exponent == pytest.approx(2.0, abs=0.35)


@pytest.mark.parametrize("order", [(1, 3, 5), (1, 3), (2, 4)])
@pytest.mark.parametrize("rate_hz", [0.0, 20.0])
def test_echo_trains_are_recognised(model, group, order: tuple[int, ...], rate_hz: float) -> None:
    """Recovery: hops of one path in the ratios 1:3:5 or 2:4, with and without sferics about.

    The fit leaves the density exponent open, which at L 2.7 costs 15 % of density (detection notes:
    18 % for ridge picks), and L a sixteenth of that.
    """
    items = [found(model, 2.7, hops, time_s=30.0) for hops in order]
    heard = [] if rate_hz == 0.0 else [heard_s(30.0, [2.7]) if order[0] == 1 else 30.0]
    seen = QUIET if rate_hz == 0.0 else sferics(heard, rate_hz=rate_hz)
    (stroke,) = group(items, seen)
    assert tuple(stroke.hops[stroke.members.index(k)] for k in range(len(order))) == order
    assert {item.path for item in stroke.traces} == {0}
    assert float(np.exp(stroke.fit.log_l[0])) == pytest.approx(2.7, rel=0.02)
    assert float(np.exp(stroke.fit.log_density[0])) == pytest.approx(climatology_m3(2.7), rel=0.3)


@pytest.mark.parametrize("hops", [1, 2, 3])
@pytest.mark.parametrize("factor", [0.7, 1.0, 1.4])
def test_hops_of_a_lone_trace_by_the_density_prior(model, group, hops: int, factor: float) -> None:
    """Recovery: without sferics the number of hops is that which needs the likeliest density.

    One hop more or less of two or three changes the density needed by a factor of 2.25 at least:
    1.4 sigma of the prior's 0.25 decades each way. A density 1.4 off is still told right.
    """
    (stroke,) = group([found(model, 2.8, hops, time_s=30.0, factor=factor)], QUIET)
    if hops == 3 and factor < 1.0:
        assert stroke.hops[0] in (2, 3)  # 0.63 of the density over three is 1.4 over two
    else:
        assert stroke.hops == (hops,)


@pytest.mark.parametrize("hops", [1, 2])
def test_hops_of_a_lone_trace_by_its_sferic(model, group, hops: int) -> None:
    """Recovery: the sferic decides where density would mislead: twice the climatology's for one
    hop looks like half of it for two, 0.3 decades either way.

    One sferic a second besides: the time is good to some 8 ms with the profile left open, and at
    three a second the right one is 77 % probable, which names none.
    """
    item = found(model, 3.2, hops, time_s=30.0, factor=2.0 if hops == 1 else 0.5)
    time_s = heard_s(30.0, [3.2]) if hops == 1 else 30.0
    (stroke,) = group([item], sferics([time_s], rate_hz=1.0))
    assert stroke.hops == (hops,)
    assert stroke.sferic is not None
    assert stroke.sferic.odd_hops == (hops == 1)


def test_unrelated_strokes_stay_apart(model, group) -> None:
    """Recovery: the same path lit three times, and another path 40 ms later, are four strokes."""
    items = [found(model, 3.4, 1, time_s=time_s, seed=k) for k, time_s in enumerate((20, 30, 31.3))]
    items.append(found(model, 3.9, 1, time_s=30.04))
    heard = [heard_s(20, [3.4]), heard_s(30, [3.4]), heard_s(31.3, [3.4]), heard_s(30.04, [3.9])]
    for seen in (QUIET, sferics(heard, rate_hz=2.0)):
        strokes = group(items, seen)
        assert partition(strokes) == [[0], [1], [2], [3]]
        times_s = [stroke.fit.lightning_time_s for stroke in strokes]
        np.testing.assert_allclose(times_s, [20.0, 30.0, 30.04, 31.3], atol=1e-2)


def test_every_trace_is_in_one_stroke_whatever_the_order(model, group) -> None:
    """Identity: shuffled traces give the same strokes."""
    items = [found(model, 2.6, hops, time_s=10.0) for hops in (1, 3)]
    items += [found(model, l_value, 1, time_s=25.0) for l_value in (2.4, 3.5)]
    items += [found(model, 3.0, 2, time_s=40.0)]
    heard = [heard_s(10.0, [2.6]), heard_s(25.0, [2.4, 3.5]), 40.0]
    seen = sferics(heard, rate_hz=5.0)
    first = group(items, seen)
    assert partition(first) == [[0, 1], [2, 3], [4]]
    order = [3, 0, 4, 2, 1]
    second = group([items[k] for k in order], seen)
    back = sorted(sorted(order[k] for k in stroke.members) for stroke in second)
    assert back == partition(first)
    for one, other in zip(first, second, strict=True):
        assert one.fit.lightning_time_s == pytest.approx(other.fit.lightning_time_s, abs=1e-4)
        assert sorted(one.hops) == sorted(other.hops)
    assert group([], seen) == []


# Pieces of the evidence


@pytest.fixture
def one_fit(model: FieldLineModel) -> StrokeFit:
    item = found(model, 3.0, 1, time_s=30.0)
    return fit_stroke(
        [PathTrace(item.trace, 1, 0)],
        start=[(3.0, item.density_m3)],
        lightning_time_s=30.0,
        model=model,
        scatter=ModelScatter(0.65, 1.5e6),
    )


def test_times_are_compared_under_one_model(one_fit: StrokeFit) -> None:
    """Reference (by hand): times y = t + g z + e, nothing known of z but its unit spread.

    Each alone: t has variance s^2 + |g|^2 and covariance -g with z. Their difference under one z
    has the mean y2 - y1 and the variance s1^2 + s2^2 + |g2 - g1|^2.
    """
    slope = (np.array([0.010, 0.004]), np.array([0.013, 0.004]))
    noise_s = (0.002, 0.003)
    fits = []
    for time_s, g, s in zip((30.0, 30.008), slope, noise_s, strict=True):
        total = np.eye(5)
        total[2, 2] = s**2 + g @ g
        total[2, 3:] = total[3:, 2] = -g
        fits.append(
            replace(
                one_fit,
                lightning_time_s=time_s,
                covariance=np.eye(3),
                total_covariance=total,
                open_sigmas=np.zeros(2),
            )
        )
    apart_s, sd_s = _apart(*fits)
    assert apart_s == pytest.approx(0.008, rel=1e-6)
    assert sd_s == pytest.approx(np.sqrt(0.002**2 + 0.003**2 + 0.003**2), rel=1e-6)


def test_orders_are_as_probable_as_their_scores() -> None:
    """Identity: scores are logarithms of odds."""
    order, probability = _likeliest_order(
        {1: np.log(0.2) + 7, 2: np.log(0.7) + 7, 3: np.log(0.1) + 7}
    )
    assert (order, probability) == (2, pytest.approx(0.7))


def test_paths_depart_from_the_climatology_once(one_fit: StrokeFit, settings: Settings) -> None:
    """Identity: two paths 0.3 decades above it depart by 0.3, not 0.6."""
    l_values = np.array([2.5, 3.5])
    density = np.array([climatology_m3(value) for value in l_values]) * 10**0.3
    pair = replace(
        one_fit, log_l=np.log(l_values), log_density=np.log(density), covariance=np.eye(5)
    )
    departure, by_x = _density_departure(pair, settings)
    assert departure == pytest.approx(0.3 * np.log(10.0))
    assert by_x[[1, 3]] == pytest.approx([0.5, 0.5])


def test_a_trace_beside_a_train_is_not_told_by_it(model: FieldLineModel, group) -> None:
    """Recovery: echoes are certain of their orders, another path of the stroke is not.

    At 2.2 times the climatology one hop is 0.34 decades off, and two hops 0.26.
    """
    train = [found(model, 2.6, hops, time_s=30.0) for hops in (1, 3)]
    (alone,) = group(train, QUIET)
    assert alone.hop_probability == 1.0
    strokes = group([*train, found(model, 3.3, 1, time_s=30.0, factor=2.2)], QUIET)
    other = next(stroke for stroke in strokes if 2 in stroke.members)
    assert 0.2 < other.hop_probability < 0.99
