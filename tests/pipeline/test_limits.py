"""The pieces of the campaign of the limits, on samples and scenes small enough for every day.

What the campaign itself reaches is measured by hand: `python -m tests.benchmarks.limits`.
"""

from __future__ import annotations

import json
import math
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from promises import Figure, Grid, plain, table
from scoring import Pair, Scored, Summary, campaign_scene, describe_pair

sys.path.insert(0, str(Path(__file__).parents[1] / "benchmarks"))

from limits import PARTS, document
from limits_decoys import causes, contents, decoy_scene
from limits_errors import Bounded, astray_scene, coverage_figures, ratio_grid, tube_figures
from limits_groups import Heard, calibration, joined, nearest, strokes
from limits_joint import by_kind, mean_shares
from limits_level import levels
from limits_run import Job, Options, Part, jobs_until, measure_job, shared_out
from limits_separable import SINGLE, delay_s, second_path, twin_scene
from limits_stats import Curve, bins, exact_interval, hourly_figure, logistic, resampled
from limits_strength import DIFFUSE, THIN, curve_figures, diffuse_scene, share_at
from ridge_bound import RidgeBound

from tests.benchmarks.joint_gain import Gain
from whistler.rows import WhistlerRow
from whistler.synthesis.render import render
from whistler.synthesis.truth import TraceTruth, WhistlerTruth
from whistler.trace import Trace


def truth_at(lightning_s: float, *, group: int = 1, hops: int = 1, **values) -> WhistlerTruth:
    frequency = np.linspace(1000.0, 9000.0, 50)
    whole = {
        "l_value": 3.0,
        "equatorial_density_cm3": 1000.0,
        "snr_db": 10.0,
        "sferic_time_s": lightning_s + 0.04,
        "sferic_seen": True,
        **values,
    }
    return WhistlerTruth(
        group=group,
        hops=hops,
        lightning_time_s=lightning_s,
        sferic_peak=1.0,
        frequency_low_hz=1000.0,
        frequency_high_hz=9000.0,
        spread_s=0.001,
        equatorial_gyrofrequency_hz=30e3,
        complete=True,
        trace=TraceTruth(frequency, lightning_s + 60.0 * frequency**-0.5),
        **whole,
    )


def row_of(truth: WhistlerTruth, *, group: int = 1, **values) -> WhistlerRow:
    whole = {
        "sferic_time_s": truth.sferic_time_s,
        "sferic_seen": True,
        "hops": truth.hops,
        "l_value": truth.l_value,
        "l_value_sd": 0.01 * truth.l_value,
        "l_value_profile_sd": 0.0,
        "equatorial_density_cm3": truth.equatorial_density_cm3,
        "equatorial_density_sd_cm3": 0.02 * truth.equatorial_density_cm3,
        "equatorial_density_profile_sd_cm3": 0.0,
        "uncertainty_status": "ok",
        **values,
    }
    return WhistlerRow("made.flac", group, **whole)


@pytest.mark.parametrize(("half_db", "width_db"), [(0.5, 0.7), (-1.5, 0.4)])
def test_logistic_curve_is_recovered(half_db, width_db):
    """Recovery: 4000 outcomes of a known curve. Half the strength is then good to about 0.04 dB,
    the width to 6 % (from the Fisher information); three times that is allowed."""
    generator = np.random.default_rng(5)
    strength_db = generator.uniform(-4.0, 8.0, 4000)
    truth = Curve(half_db, width_db)
    found = generator.random(4000) < [truth.share(value) for value in strength_db]
    curve = logistic(strength_db, found)
    assert curve.half_db == pytest.approx(half_db, abs=0.12)
    assert curve.width_db == pytest.approx(width_db, rel=0.18)
    assert curve.share(curve.strength_db(0.9)) == pytest.approx(0.9)


def test_logistic_curve_without_a_miss_lies_below_the_sample():
    """Identity: nothing missed from 4 dB on is found by half somewhere below 4 dB, finitely."""
    strength_db = np.linspace(4.0, 12.0, 40)
    curve = logistic(strength_db, np.ones(40, dtype=bool))
    assert -20.0 < curve.strength_db(0.5) < 4.0
    assert curve.share(4.0) > 0.9


@pytest.mark.parametrize("count", [1, 20, 150])
def test_exact_interval_has_its_closed_form_at_the_ends(count):
    """Reference: Clopper and Pearson for none and all of n, 1 - 0.025**(1/n) (common practice)."""
    end = 1.0 - 0.025 ** (1.0 / count)
    assert exact_interval(0, count) == (0.0, pytest.approx(end))
    assert exact_interval(count, count) == (pytest.approx(1.0 - end), 1.0)


def test_hourly_rate_has_its_closed_form_for_none():
    """Reference: no event of a Poisson law in two hours; at most -ln 0.025 / 2 an hour."""
    figure = hourly_figure("false rows", 0, 120.0, high=1.0)
    assert figure.kept
    assert figure.interval == (0.0, pytest.approx(-math.log(0.025) / 2.0))
    assert hourly_figure("false rows", 3, 120.0, high=1.0).value == 1.5


def test_resampling_draws_whole_clusters():
    """Recovery: 400 values in 40 clusters that move together scatter like 40, not like 400."""
    generator = np.random.default_rng(6)
    cluster = np.repeat(np.arange(40), 10)
    values = generator.normal(0.0, 1.0, 40)[cluster]
    ((low, high),) = resampled(cluster, lambda index: [float(values[index].mean())])
    wanted = 2 * 1.96 * values[::10].std() / math.sqrt(40.0)
    assert high - low == pytest.approx(wanted, rel=0.2)  # 400 resamples: 5 to 10 % on each end


def test_bins_hold_every_value_once():
    """Identity: bins share no value and leave out none, the last edge included."""
    values = np.array([0.0, 0.5, 1.0, 1.5, 2.0])
    masks = [inside for _, _, inside in bins((0.0, 1.0, 2.0), values)]
    assert np.sum(masks, axis=0).tolist() == [1] * 5
    assert masks[1].tolist() == [False, False, True, True, True]


def test_rendered_strength_is_the_one_asked_for():
    """Recovery: by scipy's transform with another hop, within 0.5 dB (the campaign's promise)."""
    scene = campaign_scene(7, campaign=replace(THIN, pause_range_s=(0.5, 1.0)), duration_s=12.0)
    read = levels(scene)
    assert len(read) >= 2
    assert [level.measured_db for level in read] == pytest.approx(
        [level.wanted_db for level in read], abs=0.5
    )
    assert all(level.quiet_db > level.measured_db for level in read)  # sferics are noise, too


def test_drawn_scenes_are_those_the_parts_speak_of():
    """Identity: strengths, thickness, bands, paths, hops, media and rates of drawn scenes."""
    diffuse, astray = diffuse_scene(1), [astray_scene(seed) for seed in range(20)]
    paths = [path for stroke in diffuse.strokes for path in stroke.paths]
    assert len(paths) == len(diffuse.strokes) >= 8
    assert {path.spread_s for path in paths} == {0.025}
    assert all(path.frequency_high_hz <= 6000.0 and path.hops == (1,) for path in paths)
    assert all(DIFFUSE.snr_range_db[0] <= path.snr_db <= 12.0 for path in paths)
    assert 5.0 <= diffuse.sferics[0].rate_hz <= 80.0
    exponents = [scene.medium.density_exponent for scene in astray]
    assert min(exponents) < 0.5
    assert 2.5 < max(exponents) <= 3.0
    assert all(3.0 <= scene.medium.fo_f2_mhz <= 9.0 for scene in astray)
    jobs = jobs_until(diffuse_scene, range(1, 9), least=12)
    assert [job.seed for job in jobs] == [1, 2]


def test_thunder_clips_and_causes_are_told_apart():
    """Identity: every third decoy scene clips; along its sweep, a scene's power is the sweep's."""
    scenes = [decoy_scene(seed) for seed in range(3, 9)]
    counts = {figure.name: figure.value for figure in contents(scenes)}
    assert counts["scenes with clipped thunder"] == 2
    thunder = replace(scenes[0], duration_s=20.0)
    samples = render(thunder).samples
    assert np.sum(np.abs(samples) >= 1.0 - 2.0**-15) > 3
    assert render(replace(scenes[1], duration_s=5.0)).truth.full_scale > 0.0

    carrier = replace(thunder.transmitters[0], keying="steady", frequency_hz=5200.0, level_db=30.0)
    scene = replace(thunder, transmitters=(carrier,), receiver=scenes[1].receiver)
    time_s = np.linspace(2.0, 15.0, 40)
    row = WhistlerRow("made", 1, trace=Trace(np.full(40, 5200.0), time_s, np.full(40, 1e-3)))
    assert causes(scene, row).startswith("transmitter")


def test_the_second_of_two_paths_comes_as_much_later_as_wanted():
    """Recovery: by the travel time of both; only L or only density differs."""
    path = twin_scene(4).strokes[0].paths[0]
    model = SINGLE.medium.field_line_model()
    for in_l in (True, False):
        other = second_path(path, gap_s=0.02, in_l=in_l, model=model)
        assert delay_s(other, model) - delay_s(path, model) == pytest.approx(0.02, abs=1e-9)
        assert (other.l_value != path.l_value) == in_l
        assert (other.equatorial_density_cm3 != path.equatorial_density_cm3) != in_l


def test_errors_are_taken_relative_to_the_bound():
    """Identity: sigma and error in units of the bound; rows without sigma count as infinite."""
    truth = truth_at(1.0)
    bound = RidgeBound(0.004, 0.01, 0.001)
    sure = Bounded(truth, row_of(truth, l_value=3.03), bound)
    sigma, error, limit = sure.relative["L"]
    assert (sigma / limit, error / limit) == (pytest.approx(2.5), pytest.approx(2.5))
    assert sure.relative["density"] == (pytest.approx(0.02), pytest.approx(0.0), 0.01)
    unsure = Bounded(truth, row_of(truth, uncertainty_status="prior-dominated"), bound)
    assert unsure.relative["L"][0] == math.inf
    grid = ratio_grid([sure, unsure, sure])
    assert [row[:3] for row in grid.rows] == [("2.6 to 3.2", "known", 3.0)]
    assert grid.rows[0][3] == pytest.approx(2.5)


def test_joint_gains_are_averaged_by_kind_of_stroke():
    """Identity: factors of 2 and 8 in theory are 4 together; errors shrunk by 3 reach 2/3 of it."""
    theory = [np.array([[2.0, 2.0], [1.0, 1.0]]), np.array([[8.0, 8.0], [1.0, 1.0]])]
    errors, stated = np.array([[3.0, 3.0], [1.0, 1.0]]), np.array([[4.0, 2.5], [1.0, 1.0]])
    gains = [Gain(sd, errors, stated) for sd in theory]
    kinds = by_kind(["L 2.2, three paths", "L 2.5, three paths"], gains)
    assert list(kinds) == ["three paths"]
    shares = mean_shares(kinds["three paths"])
    np.testing.assert_allclose(shares, [[2 / 3, 2 / 3], [1.0, 0.5]])


def test_coverage_counts_rows_with_sigma_only():
    """Identity: of three stated rows, one is 0.5 and one 1.5 sigma off, one 3; one is unstated."""
    pairs = []
    for k, off in enumerate((0.5, 1.5, 3.0, 9.0)):
        truth = truth_at(10.0 * k)
        row = row_of(truth, l_value=truth.l_value * (1.0 + 0.01 * off))
        pairs.append(Pair(k, truth, row))
    pairs[3] = replace(pairs[3], row=replace(pairs[3].row, uncertainty_status="undetermined"))
    shares = [figure.value for figure in coverage_figures(tuple(pairs), profile=False)]
    assert shares == pytest.approx([100 / 3, 200 / 3, 100.0, 100.0])
    assert list(tube_figures([], ())) == []


def test_pairs_of_rows_are_counted_joined_or_apart():
    """Identity: two strokes 1 s apart with two paths each; one row went to the wrong group."""
    truths = [truth_at(0.0), truth_at(0.0), truth_at(1.0, group=2), truth_at(1.0, group=2)]
    pairs = tuple(
        Pair(1, truth, row_of(truth, group=group))
        for truth, group in zip(truths, (1, 1, 2, 1), strict=True)
    )
    together, apart = joined([pairs])
    assert sorted(together) == [False, True]
    assert (len(apart), sum(apart)) == (4, 2)
    far = tuple(replace(pair, truth=replace(pair.truth, group=k)) for k, pair in enumerate(pairs))
    far = tuple(
        replace(pair, truth=replace(pair.truth, lightning_time_s=9.0 * k))
        for k, pair in enumerate(far)
    )
    assert joined([far]) == ([], [])


def test_a_stroke_counts_once_with_its_likeliest_sferic():
    """Identity: three rows in two groups; the unnamed sferic is the catalogued one nearest."""
    named, unnamed = truth_at(1.0), truth_at(5.0, group=2)
    pairs = (
        Pair(1, named, row_of(named, group=1)),
        Pair(1, named, row_of(named, group=1)),
        Pair(1, unnamed, row_of(unnamed, group=2, sferic_time_s=5.043, sferic_seen=False)),
        Pair(1, truth_at(8.0, group=3), None),
    )
    heard = Heard(Scored(1, 60.0, pairs, ()), np.array([1.04, 5.041, 5.06]))
    listed = strokes((heard,))
    assert [one.likeliest_s for one in listed] == [1.04, 5.041]
    assert all(one.right for one in listed)
    assert math.isnan(nearest(np.zeros(0), 1.0))
    grid = calibration("p", np.array([0.2, 0.97, 0.98]), np.array([False, True, False]))
    assert [row[0] for row in grid.rows] == ["0 to 0.3", "0.95 to 0.99"]
    assert grid.rows[1][3] == 50.0


def test_a_small_campaign_runs_from_scene_to_figures():
    """Recovery: two thin whistlers well above the limit are found, and the figures say so."""
    strong = replace(THIN, snr_range_db=(12.0, 14.0), pause_range_s=(0.3, 0.6))
    scene = campaign_scene(3, campaign=strong, duration_s=12.0)
    (scored,) = shared_out(measure_job, [Job(3, scene)], Options(workers=1), name="test")
    summary = Summary.of([scored])
    assert len(summary.pairs) >= 2
    assert summary.found_share == 1.0
    assert summary.extra == ()
    (figure,) = curve_figures(summary.pairs, ((0.9, 20.0),))
    assert figure.kept
    assert share_at(summary.pairs, 13.0, low=50.0).kept
    assert f"L {summary.pairs[0].truth.l_value:.2f}" in describe_pair(summary.pairs[0])


def test_figures_and_tables_become_markdown_and_strict_json():
    """Identity: what is measured stands beside its promise; infinities become null."""
    figures = (
        Figure("share", 91.0, low=90.0, interval=(85.0, 96.0)),
        Figure("sigma", math.inf, high=1.5, unit="", interval=(1.0, math.inf)),
    )
    grid = Grid("Bins", ("L", "share"), (("2 to 3", 91.04), ("3 to 4", math.nan)))
    part = Part("Title", figures, (grid,), notes=("Note.",), oddities=("seed 1",))
    text = str(part)
    assert "| share | 91 % (85 to 96) | at least 90 % | kept |" in text
    assert "| sigma | inf (1 to inf) | at most 1.5 | **missed** |" in text
    assert "| 3 to 4 | - |" in text
    assert "- seed 1" in text
    assert table("Title", figures) in text
    document_figures = json.loads(json.dumps([plain(one) for one in figures], allow_nan=False))
    assert document_figures[1]["value"] is None
    assert document_figures[1]["interval"] == [1.0, None]
    whole = json.loads(document({"made": part}))["made"]
    assert whole["figures"] == document_figures
    assert whole["tables"][0]["rows"][1] == ["3 to 4", None]
    assert document(dict.fromkeys(PARTS, part)).count('"title": "Title"') == len(PARTS) == 9
