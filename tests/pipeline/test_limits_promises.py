"""Promises of the campaign of the limits: each is kept by good numbers and missed by bad ones."""

from __future__ import annotations

import math
import sys
from pathlib import Path

import numpy as np
import pytest
from scoring import Scored
from test_limits import row_of, truth_at

sys.path.insert(0, str(Path(__file__).parents[1] / "benchmarks"))

import limits_decoys
import limits_strength
from limits_errors import Bounded, consistency_figure
from limits_run import Options
from limits_stats import calibration_figure, least_hourly_figure
from ridge_bound import RidgeBound

EDGES = (0.0, 0.5, 0.9, 1.0)


def test_few_minutes_miss_a_rate_only_when_they_show_it():
    """Reference: the lower 95 % limit for one event is -ln 0.95 (common practice); two hours."""
    one = least_hourly_figure("false rows", 1, 120.0, high=1.0)
    assert one.value == pytest.approx(-math.log(0.95) / 2.0)
    assert least_hourly_figure("false rows", 0, 5.0, high=1.0).value == 0.0
    assert least_hourly_figure("false rows", 2, 30.0, high=1.0).kept  # 0.36 over half an hour
    assert not least_hourly_figure("false rows", 3, 30.0, high=1.0).kept  # 0.82 over half an hour


def calibrated(stated: float, hits: int, count: int):
    right = np.arange(count) < hits
    return calibration_figure("p", EDGES, np.full(count, stated), right, high=10.0)


def test_calibration_is_missed_by_what_chance_cannot_make():
    """Identity: 95 % stated and 70 of 100 right are 25 points apart; 19 cases are not judged."""
    wrong = calibrated(0.95, 70, 100)
    assert wrong.value == pytest.approx(25.0)
    assert not wrong.kept
    assert calibrated(0.95, 90, 100).value == 0.0  # within 82 to 95 % of Clopper and Pearson
    assert calibrated(0.95, 88, 100).value == pytest.approx(7.0)  # outside, yet within ten points
    assert calibrated(0.95, 17, 20).value == 0.0
    few = calibrated(0.95, 0, 19)
    assert math.isnan(few.value)
    assert not few.kept


@pytest.mark.parametrize(("scale", "kept"), [(0.6, False), (1.0, True), (1.5, False)])
def test_errors_are_compared_with_the_sigmas_that_are_stated(scale, kept):
    """Recovery: 2000 normal errors of `scale` sigmas; rows without sigma do not count. The median
    of 2000 gives the width to 3 %, which is less than the limits leave."""
    generator = np.random.default_rng(4)
    truth, bound = truth_at(1.0), RidgeBound(0.004, 0.01, 0.001)
    found = [
        Bounded(truth, row_of(truth, l_value=truth.l_value * (1.0 + 0.01 * scale * draw)), bound)
        for draw in generator.normal(0.0, 1.0, 2000)
    ]
    unsure = row_of(truth, l_value=7.0, uncertainty_status="undetermined")
    figure = consistency_figure([*found, *[Bounded(truth, unsure, bound)] * 4000], "L")
    assert figure.value == pytest.approx(scale, rel=0.1)
    assert figure.kept == kept
    assert not consistency_figure([Bounded(truth, unsure, bound)], "L").kept


def test_real_recordings_that_cannot_be_used_keep_no_promise(tmp_path, monkeypatch):
    """Identity: a folder without audio, and one of a file that is none, miss both promises."""
    monkeypatch.setattr(limits_decoys, "measure_all", lambda *_, **__: [Scored(1, 60.0, (), ())])
    monkeypatch.setattr(Options, "amount", lambda *_, **__: 1)
    for folder in (tmp_path / "none", tmp_path):
        part = limits_decoys.decoys(Options(workers=1, recordings=folder))
        promised = {figure.name: figure for figure in part.figures if "real" in figure.name}
        promised |= {figure.name: figure for figure in part.figures if "rows in" in figure.name}
        assert [figure.kept for figure in promised.values()] == [False, False]
        (tmp_path / "empty.wav").write_bytes(b"")
    assert part.oddities[0].startswith("empty.wav: ")
    without = limits_decoys.decoys(Options(workers=1))
    assert "not measured" in str(without)
    assert not any("real" in figure.name for figure in without.figures)


def test_a_full_campaign_of_strength_needs_500_injections(monkeypatch):
    """Identity: ten injections are too few in full, and as many as wanted with --quick."""
    truths = [truth_at(2.0 * k, snr_db=float(k)) for k in range(10)]
    pairs = tuple(limits_strength.Pair(1, truth, row_of(truth)) for truth in truths)
    summary = limits_strength.Summary(pairs, (), 1.0)
    monkeypatch.setattr(limits_strength, "jobs_until", lambda *_, **__: [])
    monkeypatch.setattr(limits_strength, "level_figures", lambda _: [])
    monkeypatch.setattr(limits_strength, "measured", lambda *_, **__: summary)
    kept = [limits_strength.strength(Options(quick=quick)).figures[0].kept for quick in (0, 1)]
    assert kept == [False, True]
