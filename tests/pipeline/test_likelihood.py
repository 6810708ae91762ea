"""Intervals of L and density: where the misfit says they end, and what they hold."""

from __future__ import annotations

import numpy as np
import pytest
from makers import model_trace

from fieldlines import FieldLineModel, saturated_density
from tests.benchmarks.curved_ridge import compared, trial
from whistler.fit import SMALL_SAMPLE, StrokeFit, fit_stroke
from whistler.likelihood import NINETY_FIVE, path_intervals
from whistler.pickfit import fit_picks
from whistler.problem import FREE, PathTrace, Ties
from whistler.settings import Settings


def fitted(
    model: FieldLineModel, l_value: float, *, band_hz: tuple[float, float], sd_s: float
) -> tuple[list[PathTrace], StrokeFit]:
    density_m3 = float(saturated_density(l_value))
    trace = model_trace(
        model,
        l_value=l_value,
        density_m3=density_m3,
        band_hz=band_hz,
        sd_s=sd_s,
        generator=np.random.default_rng(7),
    )
    traces = [PathTrace(trace, 1, 0)]
    fit = fit_stroke(traces, start=[(l_value, density_m3)], lightning_time_s=0.0, model=model)
    return traces, fit


def test_at_its_ends_the_misfit_has_risen_by_what_it_should(model: FieldLineModel) -> None:
    """Identity: held at either end of the interval of L, the ordinary fit is so much worse.

    By 1.96 squared times the widening of the sigmas, to 2 %: the ends are found to 0.5 %.
    The interval is longer below than above: a trace far below the nose tells a high L better.
    """
    traces, fit = fitted(model, 2.1, band_hz=(1500.0, 6000.0), sd_s=5e-4)
    interval = path_intervals(fit, 0, model=model, ties=FREE)
    assert interval.curved
    scale = max(1.0, fit.chi_square / fit.freedom) * (1.0 + SMALL_SAMPLE / fit.freedom)
    for end in (interval.log_l.low, interval.log_l.high):
        held = fit_stroke(
            traces,
            start=fit.start,
            lightning_time_s=fit.lightning_time_s,
            model=model,
            ties=Ties(l_value=float(np.exp(end))),
            robust=False,
        )
        rise = (held.chi_square - fit.chi_square) / scale
        assert rise == pytest.approx(NINETY_FIVE**2, rel=0.02)
    below, above = fit.log_l[0] - interval.log_l.low, interval.log_l.high - fit.log_l[0]
    assert below > 1.05 * above
    sd = np.sqrt(np.diag(fit.covariance))
    assert interval.log_l.sd == pytest.approx(sd[0], rel=0.2)
    assert interval.log_density.sd == pytest.approx(sd[1], rel=0.2)


def test_a_straight_ridge_keeps_the_covariance(model: FieldLineModel) -> None:
    """Identity: with the nose near, sigma and interval are those of the covariance."""
    _, fit = fitted(model, 3.2, band_hz=(1200.0, 9000.0), sd_s=5e-4)
    interval = path_intervals(fit, 0, model=model, ties=FREE)
    assert not interval.curved
    sd = np.sqrt(np.diag(fit.covariance))
    for found, at, best in (
        (interval.log_l, 0, fit.log_l),
        (interval.log_density, 1, fit.log_density),
    ):
        assert found.sd == pytest.approx(sd[at], rel=1e-12)
        assert found.high - best[0] == pytest.approx(NINETY_FIVE * sd[at], rel=1e-9)
        assert best[0] - found.low == pytest.approx(NINETY_FIVE * sd[at], rel=1e-9)


def test_an_end_beyond_the_limits_is_missing(model: FieldLineModel) -> None:
    """Identity: where nothing ends the interval before the limits of the fit, none is invented."""
    _, fit = fitted(model, 1.9, band_hz=(1500.0, 5000.0), sd_s=2e-3)
    interval = path_intervals(fit, 0, model=model, ties=FREE)
    assert interval.curved
    assert np.isnan(interval.log_l.low)


def test_rows_give_the_ends(model: FieldLineModel) -> None:
    """Identity: rows hold value and both ends, and the flag where the ridge is curved."""
    for l_value, band_hz, curved in ((2.1, (1500.0, 6000.0), True), (3.2, (1200.0, 9000.0), False)):
        traces, fit = fitted(model, l_value, band_hz=band_hz, sd_s=5e-4)
        (row,) = fit_picks({"a": traces[0].trace}, settings=Settings())
        assert row.uncertainty_status == "ok"
        assert ("curved-ridge" in row.flags) == curved
        assert row.l_value_low < row.l_value < row.l_value_high
        density = row.equatorial_density_cm3
        assert row.equatorial_density_low_cm3 < density < row.equatorial_density_high_cm3
        reach = NINETY_FIVE * np.sqrt(fit.covariance[0, 0])
        if not curved:
            assert row.l_value_high == pytest.approx(row.l_value * np.exp(reach), rel=1e-6)
        (held,) = fit_picks({"a": traces[0].trace}, settings=Settings(), l_value=l_value)
        assert np.isnan(held.l_value_low)
        assert held.equatorial_density_low_cm3 < held.equatorial_density_cm3


def test_intervals_of_curved_ridges_hold_the_truth(model: FieldLineModel) -> None:
    """Recovery: of 200 noisy traces at L 1.9 to 2.6, those with curved ridges; fixed seed.

    The full benchmark has thousands. Of some 70 rows 95 % to 5 % (two of its scatter). The
    covariance alone misses on one side only; the delivered intervals do not miss more there.
    """
    generator = np.random.default_rng(12)
    done = [trial(model, generator) for _ in range(200)]
    curved = [item for item in done if item.row.uncertainty_status == "ok" and item.curved]
    assert len(curved) > 50
    found = compared(curved)
    for name in ("L", "density"):
        assert found[name][0].inside > 0.90
    assert found["L"][0].below <= found["L"][1].below
    assert found["density"][0].above <= found["density"][1].above
