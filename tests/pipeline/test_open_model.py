"""What the model leaves open: fitted where the traces tell, counted in the errors where not."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from makers import model_trace

from fieldlines import FieldLineModel, saturated_density
from fieldlines.errors import FloatArray
from whistler.commands.points import points_table
from whistler.fit import SMALL_SAMPLE, StrokeFit, fit_stroke
from whistler.group import Stroke
from whistler.pickfit import fit_picks, left_over_s, refit
from whistler.problem import FREE, PathTrace, SfericTime, StrokeProblem, Ties, sferic_path_s
from whistler.rows import WhistlerRow
from whistler.scatter import EXPONENT_LIMITS, LEAST_SHARE, ModelScatter, declared_scatter
from whistler.settings import Settings
from whistler.settle import leaning, settled
from whistler.trace import Trace

LIGHT_M_S = 299_792_458.0  # exact by the definition of the metre
BAND_HZ = (1200.0, 9000.0)


@pytest.fixture(scope="module")
def astray(model: FieldLineModel) -> FieldLineModel:
    """Plasma that falls off faster aloft, under a denser ionosphere."""
    assert model.layer is not None
    layer = replace(model.layer, critical_frequency_hz=7e6)
    return replace(model, density_exponent=2.2, layer=layer)


def drawn(model: FieldLineModel, l_value: float, *, seed: int, sd_s: float = 5e-4) -> Trace:
    return model_trace(
        model,
        l_value=l_value,
        density_m3=float(saturated_density(l_value)),
        band_hz=BAND_HZ,
        sd_s=sd_s,
        generator=np.random.default_rng(seed),
    )


def as_stroke(trace: Trace, model: FieldLineModel, ties: Ties = FREE) -> Stroke:
    """One trace, fitted as if nothing were open, and not yet settled."""
    traces = (PathTrace(trace, 1, 0),)
    start = [(3.0, float(saturated_density(3.0)))]
    fit = fit_stroke(traces, start=start, lightning_time_s=0.0, model=model, robust=False)
    return Stroke((0,), (1,), traces, fit, ties.sferic, 1.0)


def settle(
    trace: Trace, model: FieldLineModel, ties: Ties = FREE, **declared: object
) -> tuple[Stroke, StrokeFit, Ties]:
    settings = Settings(**declared)  # type: ignore[arg-type]
    return settled(as_stroke(trace, model, ties), ties, model=model, settings=settings)


@pytest.mark.parametrize("layer", [True, False])
def test_jacobian_with_an_open_model_is_the_derivative_of_the_residual(
    model: FieldLineModel, layer: bool
) -> None:
    """Identity: central differences at 20 random points, two paths and hops, soft sferic tie.

    Steps of 1e-5 in unknowns of order one: truncation 1e-10 of residuals up to 1e4, rounding 1e-7.
    """
    generator = np.random.default_rng(1)
    model = model if layer else replace(model, layer=None)
    paths = [(2.5, 1.3e9, 1), (2.5, 1.3e9, 3), (3.8, 5e8, 1)]
    traces = [
        PathTrace(
            model_trace(model, l_value=a, density_m3=b, band_hz=BAND_HZ, hops=hops, count=9),
            hops,
            int(a > 3.0),
            0.002,
        )
        for a, b, hops in paths
    ]
    tie = Ties(SfericTime(0.036, 5e-4, odd_hops=True, place_sd_s=0.0027))
    problem = StrokeProblem(traces, tie, model, 0.0, declared_scatter(Settings()))
    assert problem.size == 5 + len(traces) + 2
    for _ in range(10):
        x = np.array([*np.log([2.5, 1.3e9, 3.8, 5e8]), *np.zeros(6)])
        x[: problem.clock] += 0.02 * generator.standard_normal(problem.clock)
        x[problem.clock : problem.open] = generator.standard_normal(4)
        x[problem.open :] = generator.uniform(-1.2, 3.0, 2)
        wanted = np.stack(
            [
                (problem.residual(x + step) - problem.residual(x - step)) / 2e-5
                for step in 1e-5 * np.eye(len(x))
            ],
            axis=1,
        )
        jacobian = problem.jacobian(x)
        moves = np.abs(jacobian).max(axis=0)
        assert np.all(moves > 0.5)
        np.testing.assert_allclose(jacobian / moves, wanted / moves, atol=2e-6)
    # Without a layer its unknown is moved by nothing but its own spread.
    assert (np.count_nonzero(jacobian[:, problem.open + 1]) > 1) == layer


def test_sigmas_and_limits_of_the_open_model(model: FieldLineModel) -> None:
    """Reference: the declared spreads written out; 40 km of height as 52 kHz of foF2 more."""
    scatter = declared_scatter(Settings())
    assert scatter.density_exponent == 0.65
    assert scatter.critical_frequency_hz == pytest.approx(math.hypot(1.5e6, 52e3))
    moved = scatter.moved(model, np.array([2.0, -1.0]))
    assert moved.layer is not None
    assert moved.density_exponent == pytest.approx(2.3)
    assert moved.layer.critical_frequency_hz == pytest.approx(5e6 - math.hypot(1.5e6, 52e3))
    ends = [scatter.moved(model, end) for end in scatter.limits(model)]
    assert ends[0].layer is not None
    assert [end.density_exponent for end in ends] == pytest.approx(EXPONENT_LIMITS, abs=0.3)
    assert ends[0].layer.critical_frequency_hz == pytest.approx(LEAST_SHARE * 5e6)
    held = ModelScatter(0.0, 0.0)
    low, high = held.limits(replace(model, layer=None))
    assert np.all(low < 0.0) and np.all(high > 0.0)
    assert held.moved(model, high) == model


def test_where_the_trace_tells_the_profile_it_is_fitted(
    model: FieldLineModel, astray: FieldLineModel
) -> None:
    """Recovery: exponent 2.2 and foF2 7 MHz at L 4.0, nose in the band: density within 5 %.

    Held, the default model is over 50 % off. The row tells its model, near the true one (the layer
    itself is hardly told), and trace, curve and rms belong together.
    """
    true_cm3 = float(saturated_density(4.0)) / 1e6
    for seed in range(6):
        trace = drawn(astray, 4.0, seed=seed)
        (row,) = fit_picks({"a": trace}, settings=Settings())
        assert (row.uncertainty_status, row.flags) == ("ok", ("profile-fitted",))
        assert row.equatorial_density_cm3 == pytest.approx(true_cm3, rel=0.05)
        sd = math.hypot(row.equatorial_density_sd_cm3, row.equatorial_density_profile_sd_cm3)
        assert abs(row.equatorial_density_cm3 - true_cm3) < 3.3 * sd < 0.15 * true_cm3
        assert row.density_exponent == pytest.approx(2.2, abs=0.3)
        assert row.fo_f2_mhz == pytest.approx(7.0, abs=3.0) and row.fo_f2_mhz != 5.0
        held = as_stroke(trace, model).fit
        assert held.start[0][1] > 1.5e6 * true_cm3
        left_s = left_over_s(row, settings=Settings())
        assert row.fit_rms_s == pytest.approx(math.sqrt(np.mean(left_s**2)), rel=1e-3)
        assert row.fit_rms_s < 7e-4
    table = points_table([row], settings=Settings())
    left_ms = [line.split()[-1] for line in table.splitlines()[1 : 1 + len(trace.time_s)]]
    np.testing.assert_allclose([float(text) for text in left_ms], 1e3 * left_s, atol=0.006)


def test_where_it_does_not_the_default_stands_and_the_errors_say_so(
    model: FieldLineModel, astray: FieldLineModel
) -> None:
    """Recovery: the same plasma at L 2.3, far below the nose: wrong by what the errors allow."""
    true_cm3 = float(saturated_density(2.3)) / 1e6
    for seed in range(6):
        (row,) = fit_picks({"a": drawn(astray, 2.3, seed=seed)}, settings=Settings())
        assert row.uncertainty_status == "ok"
        assert "profile-fitted" not in row.flags
        assert row.density_exponent == 1.0
        assert row.fo_f2_mhz == pytest.approx(5.0)
        assert row.equatorial_density_profile_sd_cm3 > 0.15 * row.equatorial_density_cm3
        off_cm3 = row.equatorial_density_cm3 - true_cm3
        assert off_cm3 > 0.3 * true_cm3  # 1.85 sigma of the exponent and 1.3 of foF2 away
        assert off_cm3 < 3.0 * row.equatorial_density_profile_sd_cm3


def test_rows_without_numbers_tell_no_model(model: FieldLineModel) -> None:
    """Identity: neither where nothing fits nor where a limit was met."""
    beyond = model_trace(model, l_value=2.6, density_m3=4e12, band_hz=BAND_HZ)
    bent = drawn(model, 3.0, seed=1)
    bent = replace(bent, time_s=bent.time_s + 0.05 * np.sin(bent.frequency_hz / 500.0))
    for trace in (beyond, bent):
        (row,) = fit_picks({"a": trace}, settings=Settings())
        assert math.isnan(row.l_value)
        assert math.isnan(row.density_exponent) and math.isnan(row.fo_f2_mhz)
        assert np.isnan(left_over_s(row, settings=Settings())).all()


def test_the_default_model_stands_against_noise(model: FieldLineModel) -> None:
    """Recovery: of 100 draws from the default model at most 3 are called otherwise.

    By the law of chi-square with two degrees of freedom 12 is passed once in 400; spreads that are
    declared only lower that.
    """
    fitted = 0
    for seed in range(100):
        trace = drawn(model, 2.6 + 0.015 * seed, seed=seed)
        stroke, opened, _ = settle(trace, model)
        fitted += stroke.fit is opened
    assert fitted <= 3


def test_sigmas_stated_too_small_are_no_objection(model: FieldLineModel) -> None:
    """Identity: with sigmas a third of the noise the misfit falls nine times as far by chance.

    Held against that misfit it is the same; not so, every second draw would object (chi-square of
    two degrees of freedom passes 12 / 9 with a probability of 0.51).
    """
    fitted = 0
    for seed in range(12):
        trace = drawn(model, 3.6, seed=seed)
        stroke, opened, _ = settle(replace(trace, time_sd_s=trace.time_sd_s / 3.0), model)
        fitted += stroke.fit is opened
    assert fitted <= 1


def quick(
    trace: Trace,
    model: FieldLineModel,
    *,
    near_l: float,
    ties: Ties = FREE,
    scatter: ModelScatter | None = None,
) -> StrokeFit:
    """A fit begun near the truth, without the pass against outliers."""
    return fit_stroke(
        [PathTrace(trace, 1, 0)],
        start=[(near_l, float(saturated_density(near_l)))],
        lightning_time_s=0.0,
        model=model,
        ties=ties,
        robust=False,
        scatter=scatter,
    )


def against_scatter(fits: list[StrokeFit]) -> FloatArray:
    """Stated sigmas over the scatter of the results: of ln L, ln density and time.

    Without what they are wider by on purpose, for misfit and few points.
    """
    results = [[fit.log_l[0], fit.log_density[0], fit.lightning_time_s] for fit in fits]
    wider = [
        max(1.0, fit.chi_square / fit.freedom) * (1.0 + SMALL_SAMPLE / fit.freedom) for fit in fits
    ]
    variance = [np.diag(fit.covariance) / scale for fit, scale in zip(fits, wider, strict=True)]
    return np.asarray(np.sqrt(np.mean(variance, axis=0)) / np.std(results, axis=0, ddof=1))


def test_statistical_part_of_a_soft_tie_is_what_noise_does(model: FieldLineModel) -> None:
    """Recovery: 200 draws of points and sferic reading, the stroke where it is taken to be.

    The tie may give by 2.7 ms more than its reading; that is no noise, and is not in the scatter,
    but in the total. A sigma from 200 fits is good to 5 %, 15 % are three of that.
    """
    generator = np.random.default_rng(11)
    place_s = 800e3 / LIGHT_M_S
    fits = []
    for _ in range(200):
        trace = model_trace(
            model, l_value=2.4, density_m3=1.4e9, band_hz=BAND_HZ, generator=generator
        )
        heard_s = sferic_path_s(2.4) + 5e-4 * generator.standard_normal()
        tie = Ties(SfericTime(heard_s, 5e-4, odd_hops=True, place_sd_s=place_s))
        fits.append(quick(trace, model, near_l=2.5, ties=tie))
    np.testing.assert_allclose(against_scatter(fits), 1.0, rtol=0.15)
    for fit in fits:
        assert np.all(np.diag(fit.whole_covariance) > 1.44 * np.diag(fit.covariance))


@pytest.mark.parametrize("l_value", [2.6, 3.8])
def test_statistical_part_of_an_open_fit_is_what_noise_does(
    model: FieldLineModel, l_value: float
) -> None:
    """Recovery: the same with exponent and layer fitted, the default model true.

    At L 2.6 the declared spreads hold them, at 3.8 the points do.
    """
    generator = np.random.default_rng(12)
    density_m3 = float(saturated_density(l_value))
    fits = []
    for _ in range(200):
        trace = model_trace(
            model, l_value=l_value, density_m3=density_m3, band_hz=BAND_HZ, generator=generator
        )
        fits.append(quick(trace, model, near_l=l_value - 0.1, scatter=declared_scatter(Settings())))
    np.testing.assert_allclose(against_scatter(fits), 1.0, rtol=0.15)
    assert all(fit.open_sigmas.shape == (2,) for fit in fits)
    assert fits[0].total_covariance.shape == (5, 5)
    whole = np.array([np.diag(fit.whole_covariance) for fit in fits])
    assert np.all(whole >= np.array([np.diag(fit.covariance) for fit in fits]))


def test_settling_makes_the_sferic_a_soft_tie(model: FieldLineModel) -> None:
    """Identity: by the way of light over the declared distance; nothing else changes."""
    sferic = SfericTime(sferic_path_s(2.6), 5e-4, odd_hops=True, receiver_latitude_rad=1.0)
    trace = drawn(model, 2.6, seed=1)
    stroke, opened, ties = settle(trace, model, Ties(sferic), stroke_distance_sd_m=600e3)
    assert ties.sferic is not None
    assert ties.sferic.place_sd_s == pytest.approx(600e3 / LIGHT_M_S)
    assert replace(ties, sferic=replace(ties.sferic, place_sd_s=0.0)) == Ties(sferic)
    assert stroke.sferic == sferic
    assert stroke.fit.model is model and stroke.fit.open_sigmas.size == 0
    assert opened.open_sigmas.shape == (2,) and opened.model != model
    # both are fits of the same points
    for one, other in zip(stroke.fit.used, opened.used, strict=True):
        np.testing.assert_array_equal(one.trace.time_s, other.trace.time_s)
    assert stroke.fit.chi_square >= opened.chi_square
    _, _, free = settle(trace, model)
    assert free == FREE


def test_what_is_dropped_is_dropped_from_both(model: FieldLineModel) -> None:
    """Identity: a wild point is in neither fit, so that it cannot decide between them."""
    trace = drawn(model, 3.6, seed=2)
    wild = replace(trace, time_s=trace.time_s + np.where(np.arange(25) == 7, 0.03, 0.0))
    stroke, opened, _ = settle(wild, model)
    assert stroke.fit is not opened
    for fit in (stroke.fit, opened):
        assert trace.frequency_hz[7] not in fit.used[0].trace.frequency_hz
        assert len(fit.used[0].trace.frequency_hz) == 24


def test_a_declared_prior_enters_when_settling(model: FieldLineModel) -> None:
    """Identity: the ties of `leaning`, by what the settings declare; other ties stay."""
    before = Ties(lightning_time_s=(0.0, 1e-4))
    settings = Settings(density_prior_factor=1.3)
    after = leaning(before, settings, sd_dex=0.2)
    assert after == Ties(
        lightning_time_s=(0.0, 1e-4), density_prior_dex=0.2, density_prior_factor=1.3
    )
    trace = drawn(model, 2.6, seed=3)
    declared: dict[str, object] = {
        "fit_prior": "climatology",
        "fit_prior_sd_dex": 0.01,
        "density_prior_factor": 1.3,
    }
    free, held = settle(trace, model)[0].fit, settle(trace, model, FREE, **declared)
    assert (held[2].density_prior_dex, held[2].density_prior_factor) == (0.01, 1.3)
    # 0.01 decades hold it far closer to the climatology than the trace does
    excess = [
        fit.log_density[0] - math.log(1.3 * float(saturated_density(fit.start[0][0])))
        for fit in (free, held[0].fit)
    ]
    assert abs(excess[1]) < 0.5 * abs(excess[0])


def test_a_profile_fitted_row_fits_again(astray: FieldLineModel) -> None:
    """Identity: accepted as it is, a row fitted with its own model comes again, to 0.01 sigma."""
    traces = {str(a): drawn(astray, a, seed=4) for a in (3.6, 4.2)}
    rows = fit_picks(traces, settings=Settings(), sferic_time_s=sferic_path_s(3.9))
    again = refit(rows, settings=Settings())
    for row, same in zip(rows, again, strict=True):
        assert row.flags == same.flags == ("profile-fitted",)
        assert abs(same.l_value - row.l_value) < 0.01 * row.l_value_sd
        assert abs(same.density_exponent - row.density_exponent) < 1e-3
        assert same.fo_f2_mhz == pytest.approx(row.fo_f2_mhz, abs=1e-2)
    assert len({(row.density_exponent, row.fo_f2_mhz) for row in rows}) == 1  # one plasmasphere


def test_a_row_of_before_it_told_its_model_is_of_the_default_one(model: FieldLineModel) -> None:
    """Identity: NaN where a saved row has no such keys."""
    (row,) = fit_picks({"a": drawn(model, 2.8, seed=5)}, settings=Settings())
    older: WhistlerRow = replace(row, density_exponent=math.nan, fo_f2_mhz=math.nan)
    left_s = left_over_s(older, settings=Settings())
    np.testing.assert_allclose(left_s, left_over_s(row, settings=Settings()), atol=1e-12)
