"""Strokes: which traces belong to one lightning, over how many hops, and which sferic it was.

For every trace and every hop order the free fit predicts where the causative sferic must be. Three
kinds of evidence then decide: a sferic there (a mixture over all seen, with a "none" term), the
density against a stated prior, and other traces that agree in path and time (echo trains).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fieldlines import FieldLineModel, saturated_density
from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit, fit_stroke
from whistler.problem import PathTrace, SfericTime, Ties, sferic_at
from whistler.settings import Settings
from whistler.sferic import (
    READING_SD_S,
    Causes,
    SfericCatalogue,
    front_lag_s,
    possible_causes,
)
from whistler.trace import Trace

HOP_PRIOR = (
    0.55,
    0.25,
    0.12,
    0.05,
    0.03,
    0.01,
    0.01,
    0.01,
)  # our own estimate, from common practice
TRAIN_PRIOR = 0.1  # share of traces with an echo partner in sight (our own estimate)
STORM_SHARE = 0.1  # of the density prior, three times as wide: depleted and refilling tubes
SURE = 0.9  # probability from which a sferic is taken as identified
MODEL_FLOOR = np.array(
    [0.008, 0.03, 0.0015]
)  # what two hops of one path may differ by in the model


@dataclass(frozen=True)
class FoundTrace:
    """A trace with its one-hop-equivalent curve, before anything is known about its stroke.

    Parameters
    ----------
    trace : Trace
        The points.
    l_value, density_m3, lightning_time_s : float
        One-hop-equivalent fit.
    centre_share_sd : float
        One-sigma of where the trace lies within its thickness, as a share of the travel time.
    """

    trace: Trace
    l_value: float
    density_m3: float
    lightning_time_s: float
    centre_share_sd: float = 0.0


@dataclass(frozen=True)
class Stroke:
    """One lightning stroke with all its traces.

    Parameters
    ----------
    members : tuple of int
        Indices of the traces.
    hops : tuple of int
        Hop order of each member.
    traces : tuple of PathTrace
        The members as fitted.
    fit : StrokeFit
        Joint fit.
    sferic : SfericTime or None
        The identified causative sferic.
    sferic_probability : float
        Probability of the likeliest one.
    """

    members: tuple[int, ...]
    hops: tuple[int, ...]
    traces: tuple[PathTrace, ...]
    fit: StrokeFit
    sferic: SfericTime | None
    sferic_probability: float


@dataclass(frozen=True)
class _Reading:
    """One trace under one hop order."""

    fit: StrokeFit
    causes: Causes
    score: float
    best_cause: int
    cause_probability: float

    @property
    def mean(self) -> FloatArray:
        return np.array([self.fit.log_l[0], self.fit.log_density[0], self.fit.lightning_time_s])


def group_strokes(
    found: list[FoundTrace],
    sferics: SfericCatalogue,
    *,
    model: FieldLineModel,
    settings: Settings,
) -> list[Stroke]:
    """Return the strokes behind the traces, in time order.

    Parameters
    ----------
    found : list of FoundTrace
        All traces of a stretch of audio.
    sferics : SfericCatalogue
        All sferics of the same stretch.
    model : fieldlines.FieldLineModel
        Default model.
    settings : Settings
        Hop range, density prior, stroke distance.

    Returns
    -------
    list of Stroke
        Every trace is in exactly one.
    """
    readings = [_read_hops(item, sferics, model, settings) for item in found]
    hops, partners = _assign_hops(readings)
    strokes = [
        _fit_group(members, found, readings, hops, partners, sferics, model, settings)
        for members in _connect(readings, hops, partners)
    ]
    return sorted(strokes, key=lambda stroke: stroke.fit.lightning_time_s)


def _read_hops(
    item: FoundTrace, sferics: SfericCatalogue, model: FieldLineModel, settings: Settings
) -> dict[int, _Reading]:
    readings: dict[int, _Reading] = {}
    for hops in range(1, settings.max_hops + 1):
        density = item.density_m3 / hops**2
        prior_dex = np.log10(density / float(saturated_density(np.clip(item.l_value, 1.2, 8.0))))
        if abs(prior_dex) > 6.0 * settings.density_prior_sd_dex and readings:
            continue
        fit = fit_stroke(
            [PathTrace(item.trace, hops, 0, item.centre_share_sd)],
            start=[(item.l_value, density)],
            lightning_time_s=item.lightning_time_s,
            model=model,
            robust=False,
        )
        readings[hops] = _weigh(fit, hops, sferics, settings)
    return readings


def predicted_sferic(
    fit: StrokeFit, hops: int, *, settings: Settings
) -> tuple[float, float, FloatArray]:
    """Return where the causative sferic must be, its one-sigma, and its gradient.

    Parameters
    ----------
    fit : StrokeFit
        A fit with free time.
    hops : int
        Parity decides where the stroke was.
    settings : Settings
        Stroke distance.

    Returns
    -------
    float, float, ndarray
        Time and sigma in s; derivatives with respect to the fit's unknowns.
    """
    time_s, gradient = sferic_at(fit.log_l, fit.lightning_time_s, odd_hops=hops % 2 == 1)
    place_s = settings.stroke_distance_sd_m / SPEED_OF_LIGHT_M_S
    variance = gradient @ fit.covariance @ gradient + READING_SD_S**2 + place_s**2
    return time_s, float(np.sqrt(variance)), gradient


def _weigh(fit: StrokeFit, hops: int, sferics: SfericCatalogue, settings: Settings) -> _Reading:
    """Score one hop order: hop prior, sferic mixture and density prior together."""
    predicted_s, sd_s, gradient = predicted_sferic(fit, hops, settings=settings)
    late_s = front_lag_s(predicted_s - fit.lightning_time_s)
    causes = possible_causes(sferics, predicted_s=predicted_s + late_s, sd_s=sd_s)
    gain = fit.covariance @ gradient / sd_s**2
    shift = (causes.time_s - late_s - predicted_s)[:, None] * gain
    tied_sd = np.sqrt(max(fit.covariance[1, 1] - gain[1] * (fit.covariance @ gradient)[1], 0.0))
    with_cause = _density_score(
        fit.log_l[0] + shift[:, 0], fit.log_density[0] + shift[:, 1], float(tied_sd), settings
    )
    free = _density_score(
        fit.log_l, fit.log_density, float(np.sqrt(fit.covariance[1, 1])), settings
    )
    weight = np.append(causes.odds * np.exp(with_cause), np.exp(free[0]))
    share = weight / weight.sum()
    best = int(np.argmax(weight[:-1])) if len(causes.odds) else -1
    return _Reading(
        fit=fit,
        causes=Causes(causes.index, causes.time_s, causes.odds * np.exp(with_cause - free[0])),
        score=float(np.log(HOP_PRIOR[hops - 1]) + np.log(weight.sum())),
        best_cause=int(causes.index[best]) if best >= 0 else -1,
        cause_probability=float(share[best]) if best >= 0 else 0.0,
    )


def _density_score(
    log_l: FloatArray,
    log_density: FloatArray,
    log_density_sd: float,
    settings: Settings,
) -> FloatArray:
    """Log probability of a density under the prior: lognormal, with a wide share for storms."""
    expected = np.log(saturated_density(np.exp(np.clip(log_l, np.log(1.2), np.log(8.0)))))
    total = np.zeros_like(expected)
    for share, factor in ((1.0 - STORM_SHARE, 1.0), (STORM_SHARE, 3.0)):
        sd = np.hypot(factor * settings.density_prior_sd_dex * np.log(10.0), log_density_sd)
        total += share * np.exp(-0.5 * ((log_density - expected) / sd) ** 2) / sd
    return np.log(np.maximum(total, 1e-30))


def _likeliest(readings: dict[int, _Reading]) -> int:
    return max(readings, key=lambda hops: readings[hops].score)


def _assign_hops(
    readings: list[dict[int, _Reading]],
) -> tuple[list[int], dict[tuple[int, int], float]]:
    """Hop order of every trace, moved pair by pair where an echo train explains both better."""
    hops = [_likeliest(item) for item in readings]
    partners: dict[tuple[int, int], float] = {}
    for i in range(len(readings)):
        for j in range(len(readings)):
            if i == j:
                continue
            here = readings[i][hops[i]].score + readings[j][hops[j]].score
            best, gain, bonus = (hops[i], hops[j]), 0.0, 0.0
            for a, first in readings[i].items():
                for b, second in readings[j].items():
                    if b <= a or (b - a) % 2:
                        continue
                    agreement = _train_bonus(first, second)
                    total = first.score + second.score + agreement - here
                    if agreement > 0.0 and total > gain:
                        best, gain, bonus = (a, b), total, agreement
            if gain > 0.0 and _consistent(partners, hops, i, j, best):
                hops[i], hops[j] = best
                partners[i, j] = bonus
    return hops, partners


def _consistent(
    partners: dict[tuple[int, int], float],
    hops: list[int],
    i: int,
    j: int,
    wanted: tuple[int, int],
) -> bool:
    """A trace already in a train keeps its order there."""
    fixed = {k for pair in partners for k in pair}
    return (i not in fixed or hops[i] == wanted[0]) and (j not in fixed or hops[j] == wanted[1])


def _train_bonus(first: _Reading, second: _Reading) -> float:
    """Log odds that two traces share path and stroke, against chance agreement."""
    difference = second.mean - first.mean
    if abs(difference[2]) > 0.2:
        return -np.inf
    spread = first.fit.covariance + second.fit.covariance + np.diag(MODEL_FLOOR**2)
    sign, log_det = np.linalg.slogdet(2 * np.pi * spread)
    if sign <= 0:
        return -np.inf
    misfit = float(difference @ np.linalg.solve(spread, difference))
    # By chance: L anywhere in ln 2.5, density within its prior, time anywhere in ten seconds.
    chance = -np.log(0.9 * 1.5 * 10.0)
    return float(-0.5 * misfit - 0.5 * log_det - chance + np.log(TRAIN_PRIOR))


def _connect(
    readings: list[dict[int, _Reading]],
    hops: list[int],
    partners: dict[tuple[int, int], float],
) -> list[list[int]]:
    """Traces joined by an echo train, by one sferic, or by one lightning time."""
    parent = list(range(len(readings)))

    def root(k: int) -> int:
        while parent[k] != k:
            k = parent[k]
        return k

    chosen = [item[h] for item, h in zip(readings, hops, strict=True)]
    for i in range(len(readings)):
        for j in range(i + 1, len(readings)):
            if (hops[i] - hops[j]) % 2:
                continue
            joined = (i, j) in partners or (j, i) in partners
            if joined or _same_stroke(chosen[i], chosen[j]):
                parent[root(j)] = root(i)
    groups: dict[int, list[int]] = {}
    for k in range(len(readings)):
        groups.setdefault(root(k), []).append(k)
    return list(groups.values())


def _same_stroke(first: _Reading, second: _Reading) -> bool:
    if first.best_cause >= 0 and first.best_cause == second.best_cause:
        return min(first.cause_probability, second.cause_probability) > 0.3
    apart = abs(first.fit.lightning_time_s - second.fit.lightning_time_s)
    spread = float(np.hypot(first.fit.time_sd_s, second.fit.time_sd_s))
    both_sure = min(first.cause_probability, second.cause_probability) > SURE
    return not both_sure and apart < 2.5 * spread + 0.001 and spread < 0.01


def _paths(members: list[int], partners: dict[tuple[int, int], float]) -> dict[int, int]:
    """Path index of each member: partners of a train share one."""
    path: dict[int, int] = {}
    for k in members:
        shared = [path[other] for other in path if (k, other) in partners or (other, k) in partners]
        path[k] = shared[0] if shared else 1 + max(path.values(), default=-1)
    return path


def _fit_group(
    members: list[int],
    found: list[FoundTrace],
    readings: list[dict[int, _Reading]],
    hops: list[int],
    partners: dict[tuple[int, int], float],
    sferics: SfericCatalogue,
    model: FieldLineModel,
    settings: Settings,
) -> Stroke:
    path = _paths(members, partners)
    traces = [
        PathTrace(found[k].trace, hops[k], path[k], found[k].centre_share_sd) for k in members
    ]
    first_of = {p: k for k, p in reversed(path.items())}
    start = []
    for p in sorted(first_of):
        single = readings[first_of[p]][hops[first_of[p]]].fit
        start.append((float(np.exp(single.log_l[0])), float(np.exp(single.log_density[0]))))
    time_s = float(np.mean([readings[k][hops[k]].fit.lightning_time_s for k in members]))
    free = fit_stroke(traces, start=start, lightning_time_s=time_s, model=model)
    reading = _weigh(free, hops[members[0]], sferics, settings)
    sferic, fit = None, free
    if reading.cause_probability > SURE:
        predicted_s, _, _ = predicted_sferic(free, hops[members[0]], settings=settings)
        late_s = front_lag_s(predicted_s - free.lightning_time_s)
        at = float(sferics.time_s[reading.best_cause]) - late_s
        sferic = SfericTime(at, READING_SD_S, hops[members[0]] % 2 == 1)
        fit = fit_stroke(
            traces,
            start=free.start,
            lightning_time_s=free.lightning_time_s,
            model=model,
            ties=Ties(sferic),
        )
    return Stroke(
        tuple(members),
        tuple(hops[k] for k in members),
        tuple(traces),
        fit,
        sferic,
        reading.cause_probability,
    )
