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
from whistler.problem import PathTrace, expected_log_density, sferic_at
from whistler.scatter import declared_scatter
from whistler.settings import Settings
from whistler.sferic import READING_SD_S, SfericCatalogue, front_lag_s, possible_causes
from whistler.trace import Trace

HOP_PRIOR = (0.55, 0.25, 0.12, 0.05, 0.03, 0.01, 0.01, 0.01)  # our own estimate
LOG_L_RANGE = (np.log(1.2), np.log(8.0))  # of the climatology
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
    l_value, once_m3, start_s = item.l_value, item.density_m3, item.lightning_time_s
    near: StrokeFit | None = None
    for hops in range(1, settings.max_hops + 1):
        density = once_m3 / hops**2
        if readings and _out_of_question(l_value, density, settings):
            continue
        fit = near = fit_stroke(
            [PathTrace(item.trace, hops, 0, item.centre_share_sd)],
            start=[(l_value, density)],
            lightning_time_s=start_s,
            model=around.model,
            robust=False,
            scatter=declared_scatter(settings),
            near=near,
        )
        # The next order begins where this one ended: as one hop of so many times the density.
        (l_value, density), start_s = fit.start[0], fit.lightning_time_s
        once_m3 = density * hops**2
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
    variance = float(gradient @ fit.whole_covariance @ gradient) + READING_SD_S**2 + place_s**2
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
    # With a sferic the time is known better, and L and density move along their ridges with it.
    covariance = fit.whole_covariance
    gain = covariance @ gradient / sd_s**2
    departure, by_x = _density_departure(fit, settings)
    free_variance = float(by_x @ covariance @ by_x)
    tied_variance = free_variance - float(by_x @ gain) ** 2 * sd_s**2
    moved = departure + (causes.time_s - late_s - predicted_s) * float(by_x @ gain)
    with_cause = _density_score(moved, tied_variance, settings)
    free = _density_score(np.array([departure]), free_variance, settings)
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


def _density_departure(fit: StrokeFit, settings: Settings) -> tuple[float, FloatArray]:
    """Mean over the paths of ln density less its prior, and the derivatives of that.

    The paths of a stroke see one plasmasphere: together they depart from the climatology once.
    """
    paths = len(fit.log_l)
    by_x = np.zeros(len(fit.covariance))
    total = 0.0
    for path, (log_l, log_density) in enumerate(zip(fit.log_l, fit.log_density, strict=True)):
        clipped = float(np.clip(log_l, *LOG_L_RANGE))
        expected, slope = expected_log_density(clipped, factor=settings.density_prior_factor)
        total += (log_density - expected) / paths
        by_x[2 * path : 2 * path + 2] = np.array([-slope, 1.0]) / paths
    return total, by_x


def _density_score(departure: FloatArray, variance: float, settings: Settings) -> FloatArray:
    """Log probability of a density under the prior: lognormal, with a wide share for storms."""
    if settings.density_prior == "none":
        return np.zeros_like(departure)
    total = np.zeros_like(departure)
    for share, factor in ((1.0 - STORM_SHARE, 1.0), (STORM_SHARE, 3.0)):
        prior_sd = factor * settings.density_prior_sd_dex * np.log(10.0)
        sd = np.sqrt(prior_sd**2 + max(variance, 0.0))
        total += share * np.exp(-0.5 * (departure / sd) ** 2) / sd
    return np.asarray(np.log(np.maximum(total, 1e-30)))
