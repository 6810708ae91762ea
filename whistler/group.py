"""Strokes: which traces belong to one lightning, over how many hops, and which sferic it was.

What each trace says alone (:mod:`whistler.evidence`) is joined by what traces say of each other:
echo trains agree in path and time, paths of one stroke in time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fieldlines import FieldLineModel
from whistler.evidence import FoundTrace, Reading, Surroundings, read_hops, weigh
from whistler.fit import StrokeFit, fit_stroke
from whistler.problem import PathTrace, SfericTime
from whistler.scatter import declared_scatter
from whistler.settings import Settings
from whistler.sferic import READING_SD_S, SfericCatalogue

TRAIN_PRIOR = 0.1  # share of traces with an echo partner in sight (our own estimate)
LAG_SHARE = 0.2  # of the front's lag behind light, not known better than that
PATHS_A_STROKE = 0.4  # further paths that a stroke lights (our own estimate)
STROKE_RATE_HZ = 0.2  # of strokes heard as whistlers in a busy hour (our own estimate)
JOINING_ODDS = 3.0
HOPELESS = 8.0  # in the logarithm: an order so much less likely than the best is not tried
SURE = 0.9  # probability from which a sferic is taken as identified
MODEL_FLOOR = np.array(
    [0.008, 0.03, 0.0015]
)  # what two hops of one path may differ by in the model


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
        Joint fit of the traces alone, with what the model leaves open.
    sferic : SfericTime or None
        The identified causative sferic.
    sferic_probability : float
        Probability of the likeliest one.
    hop_probability : float
        Probability of the hop orders, given sferics, density prior and echoes.
    """

    members: tuple[int, ...]
    hops: tuple[int, ...]
    traces: tuple[PathTrace, ...]
    fit: StrokeFit
    sferic: SfericTime | None
    sferic_probability: float
    hop_probability: float = 1.0


def group_strokes(
    found: list[FoundTrace],
    sferics: SfericCatalogue,
    *,
    model: FieldLineModel,
    settings: Settings,
    receiver_latitude_rad: float | None = None,
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
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver.

    Returns
    -------
    list of Stroke
        Every trace is in exactly one.
    """
    around = Surroundings(sferics, model, settings, receiver_latitude_rad)
    readings = [read_hops(item, around=around) for item in found]
    hops, partners = _assign_hops(readings)
    strokes = [
        _fit_group(members, found, readings, hops, partners, around)
        for members in _connect(readings, hops, partners)
    ]
    return sorted(strokes, key=lambda stroke: stroke.fit.lightning_time_s)


def _likeliest(readings: dict[int, Reading]) -> int:
    return max(readings, key=lambda hops: readings[hops].score)


def _assign_hops(
    readings: list[dict[int, Reading]],
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


def _train_bonus(first: Reading, second: Reading) -> float:
    """Log odds that two traces share path and stroke, against chance agreement."""
    difference = second.mean - first.mean
    if abs(difference[2]) > 0.2:
        return -np.inf
    spread = first.fit.whole_covariance + second.fit.whole_covariance + np.diag(MODEL_FLOOR**2)
    sign, log_det = np.linalg.slogdet(2 * np.pi * spread)
    if sign <= 0:
        return -np.inf
    misfit = float(difference @ np.linalg.solve(spread, difference))
    # By chance: L anywhere in ln 2.5, density within its prior, time anywhere in ten seconds.
    chance = -np.log(0.9 * 1.5 * 10.0)
    return float(-0.5 * misfit - 0.5 * log_det - chance + np.log(TRAIN_PRIOR))


def _connect(
    readings: list[dict[int, Reading]],
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


def _same_stroke(first: Reading, second: Reading) -> bool:
    """Whether two traces began together, by their times or by their sferics."""
    if first.best_cause >= 0 and first.best_cause == second.best_cause:
        if min(first.cause_probability, second.cause_probability) > 0.3:
            return True
    elif min(first.cause_probability, second.cause_probability) > SURE:
        return False
    apart_s, sd_s = _apart(first.fit, second.fit)
    density = np.exp(-0.5 * (apart_s / sd_s) ** 2) / (np.sqrt(2.0 * np.pi) * sd_s)
    return bool(PATHS_A_STROKE * density > JOINING_ODDS * STROKE_RATE_HZ)


def _apart(first: StrokeFit, second: StrokeFit) -> tuple[float, float]:
    """How much later the second trace began, and the one-sigma of that, under one common model.

    What the model leaves open moves the times of neighbouring paths alike: it is one for both.
    """
    size = 2 + len(first.open_sigmas)
    information, pull = np.zeros((size, size)), np.zeros(size)
    information[2:, 2:] = np.eye(size - 2)  # the declared spread, once
    epoch_s = first.lightning_time_s
    for place, fit in enumerate((first, second)):
        clock = len(fit.covariance) - 1
        here = np.arange(clock, len(fit.total_covariance))
        own = np.linalg.inv(fit.total_covariance[np.ix_(here, here)])
        mean = np.append(fit.lightning_time_s - epoch_s, fit.open_sigmas)
        into = np.array([place, *range(2, size)])
        pull[into] += own @ mean
        own[1:, 1:] -= np.eye(size - 2)
        information[np.ix_(into, into)] += own
    covariance = np.linalg.inv(information)
    mean = covariance @ pull
    difference = np.zeros(size)
    difference[:2] = (-1.0, 1.0)
    return float(difference @ mean), float(np.sqrt(difference @ covariance @ difference))


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
    readings: list[dict[int, Reading]],
    hops: list[int],
    partners: dict[tuple[int, int], float],
    around: Surroundings,
) -> Stroke:
    path = _paths(members, partners)
    first_of = {p: k for k, p in reversed(path.items())}

    def joint(orders: dict[int, int]) -> tuple[tuple[PathTrace, ...], Reading]:
        traces = tuple(
            PathTrace(found[k].trace, orders[k], path[k], found[k].centre_share_sd) for k in members
        )
        singles = [readings[k][orders[k]].fit for _, k in sorted(first_of.items())]
        if len(members) == 1:
            return traces, readings[members[0]][orders[members[0]]]
        fit = fit_stroke(
            traces,
            start=[single.start[0] for single in singles],
            lightning_time_s=float(np.mean([single.lightning_time_s for single in singles])),
            model=around.model,
            scatter=declared_scatter(around.settings),
            near=singles[0],
        )
        return traces, weigh(fit, orders[members[0]], around=around)

    chosen = {k: hops[k] for k in members}
    if len(set(chosen.values())) > 1:
        # Among echoes the ratio of the delays has told the orders; others only their own evidence.
        traces, reading = joint(chosen)
        echoes = {k for pair in partners for k in pair}
        alone = [_own_probability(readings[k], hops[k]) for k in members if k not in echoes]
        probability = min(alone, default=1.0)
    else:
        tried = {h: joint(dict.fromkeys(members, h)) for h in _thinkable(members, readings)}
        order, probability = _likeliest_order({h: item[1].score for h, item in tried.items()})
        traces, reading = tried[order]
    return Stroke(
        tuple(members),
        tuple(item.hops for item in traces),
        traces,
        reading.fit,
        _sferic(reading, traces[0].hops, around),
        reading.cause_probability,
        probability,
    )


def _sferic(reading: Reading, hops: int, around: Surroundings) -> SfericTime | None:
    """The identified sferic, when there is one."""
    if reading.cause_probability <= SURE:
        return None
    return SfericTime(
        float(around.sferics.time_s[reading.best_cause]) - reading.sferic_lag_s,
        float(np.hypot(READING_SD_S, LAG_SHARE * reading.sferic_lag_s)),
        hops % 2 == 1,
        around.receiver_latitude_rad,
    )


def _thinkable(members: list[int], readings: list[dict[int, Reading]]) -> list[int]:
    """Orders that every trace allows and that are not hopeless for the traces as a whole."""
    orders = sorted(set.intersection(*(set(readings[k]) for k in members)))
    score = {h: sum(readings[k][h].score for k in members) / len(members) for h in orders}
    return [h for h in orders if score[h] > max(score.values()) - HOPELESS]


def _likeliest_order(scores: dict[int, float]) -> tuple[int, float]:
    best = max(scores, key=lambda hops: scores[hops])
    return best, 1.0 / sum(float(np.exp(score - scores[best])) for score in scores.values())


def _own_probability(readings: dict[int, Reading], hops: int) -> float:
    """Probability of one trace's order by what it says alone."""
    best = readings[hops].score
    return 1.0 / sum(float(np.exp(min(item.score - best, 50.0))) for item in readings.values())
