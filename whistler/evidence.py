"""What one trace says about its hop order and its causative sferic.

For every hop order the free fit predicts where the causative sferic must be. A sferic there (a
mixture over all seen, with a "none" term) and the density against a stated prior make its score.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fieldlines import FieldLineModel, saturated_density
from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.fit import StrokeFit, fit_stroke
from whistler.problem import PathTrace, sferic_at
from whistler.settings import Settings
from whistler.sferic import READING_SD_S, SfericCatalogue, front_lag_s, possible_causes
from whistler.trace import Trace

HOP_PRIOR = (0.55, 0.25, 0.12, 0.05, 0.03, 0.01, 0.01, 0.01)  # our own estimate
STORM_SHARE = 0.1  # of the density prior, three times as wide: depleted and refilling tubes


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
class Surroundings:
    """What the traces of one recording are judged against.

    Parameters
    ----------
    sferics : SfericCatalogue
        All sferics seen.
    model : fieldlines.FieldLineModel
        Default model.
    settings : Settings
        Hop range, density prior, stroke distance.
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver.
    """

    sferics: SfericCatalogue
    model: FieldLineModel
    settings: Settings
    receiver_latitude_rad: float | None = None


@dataclass(frozen=True)
class Reading:
    """One trace, or one stroke, under one hop order.

    Parameters
    ----------
    fit : StrokeFit
        Fit with free time.
    score : float
        Log evidence: hop prior, sferic mixture and density prior together.
    best_cause : int
        Likeliest sferic's place in the catalogue; -1 when there is none.
    cause_probability : float
        Its probability.
    sferic_lag_s : float
        How late its catalogued front is.
    """

    fit: StrokeFit
    score: float
    best_cause: int
    cause_probability: float
    sferic_lag_s: float

    @property
    def mean(self) -> FloatArray:
        """ln L, ln density and lightning time of the first path."""
        return np.array(
            [self.fit.log_l[0], self.fit.log_density[0], self.fit.lightning_time_s], np.float64
        )


def read_hops(item: FoundTrace, *, around: Surroundings) -> dict[int, Reading]:
    """Return what every possible hop order makes of a trace.

    Parameters
    ----------
    item : FoundTrace
        The trace.
    around : Surroundings
        Sferics, model and priors.

    Returns
    -------
    dict of int to Reading
        Orders whose density is out of the question are left out.
    """
    settings = around.settings
    readings: dict[int, Reading] = {}
    for hops in range(1, settings.max_hops + 1):
        density = item.density_m3 / hops**2
        if readings and _out_of_question(item.l_value, density, settings):
            continue
        fit = fit_stroke(
            [PathTrace(item.trace, hops, 0, item.centre_share_sd)],
            start=[(item.l_value, density)],
            lightning_time_s=item.lightning_time_s,
            model=around.model,
            robust=False,
        )
        readings[hops] = weigh(fit, hops, around=around)
    return readings


def _out_of_question(l_value: float, density_m3: float, settings: Settings) -> bool:
    if settings.density_prior == "none":
        return False
    expected = float(saturated_density(np.clip(l_value, 1.2, 8.0))) * settings.density_prior_factor
    return bool(abs(np.log10(density_m3 / expected)) > 6.0 * settings.density_prior_sd_dex)


def predicted_sferic(
    fit: StrokeFit, hops: int, *, settings: Settings, receiver_latitude_rad: float | None = None
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
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver.

    Returns
    -------
    float, float, ndarray
        Time and sigma in s; derivatives with respect to the fit's unknowns.
    """
    time_s, gradient = sferic_at(
        fit.log_l,
        fit.lightning_time_s,
        odd_hops=hops % 2 == 1,
        receiver_latitude_rad=receiver_latitude_rad,
    )
    place_s = settings.stroke_distance_sd_m / SPEED_OF_LIGHT_M_S
    variance = float(gradient @ fit.covariance @ gradient) + READING_SD_S**2 + place_s**2
    return time_s, float(np.sqrt(variance)), gradient


def weigh(fit: StrokeFit, hops: int, *, around: Surroundings) -> Reading:
    """Return the score of one hop order: hop prior, sferic mixture and density prior together.

    Parameters
    ----------
    fit : StrokeFit
        Fit with free time.
    hops : int
        Hop order it was made with.
    around : Surroundings
        Sferics and priors.

    Returns
    -------
    Reading
        With the likeliest sferic.
    """
    settings = around.settings
    predicted_s, sd_s, gradient = predicted_sferic(
        fit, hops, settings=settings, receiver_latitude_rad=around.receiver_latitude_rad
    )
    late_s = front_lag_s(predicted_s - fit.lightning_time_s, front_hz=around.sferics.front_hz)
    causes = possible_causes(around.sferics, predicted_s=predicted_s + late_s, sd_s=sd_s)
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
    return Reading(
        fit=fit,
        score=float(np.log(HOP_PRIOR[hops - 1]) + np.log(weight.sum())),
        best_cause=int(causes.index[best]) if best >= 0 else -1,
        cause_probability=float(share[best]) if best >= 0 else 0.0,
        sferic_lag_s=late_s,
    )


def _density_score(
    log_l: FloatArray,
    log_density: FloatArray,
    log_density_sd: float,
    settings: Settings,
) -> FloatArray:
    """Log probability of a density under the prior: lognormal, with a wide share for storms."""
    if settings.density_prior == "none":
        return np.zeros_like(log_l)
    expected = np.log(saturated_density(np.exp(np.clip(log_l, np.log(1.2), np.log(8.0)))))
    expected = expected + np.log(settings.density_prior_factor)
    total = np.zeros_like(expected)
    for share, factor in ((1.0 - STORM_SHARE, 1.0), (STORM_SHARE, 3.0)):
        sd = np.hypot(factor * settings.density_prior_sd_dex * np.log(10.0), log_density_sd)
        total += share * np.exp(-0.5 * ((log_density - expected) / sd) ** 2) / sd
    return np.asarray(np.log(np.maximum(total, 1e-30)))
