"""A bank of model curves spaced by how much power a neighbour would lose.

Every trace, of any number of hops, is close to a one-hop curve of the same L and a larger density
(h crossings of density n delay almost like one crossing of h² n), so the bank is two-parametric: L
and one-hop-equivalent density. Hops are told apart later, where there is evidence for them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from fieldlines import FieldLineModel, maximum_frequency, saturated_density, travel_time

REFERENCE_HZ = 3000.0  # where a candidate's time is quoted: inside every band this tool meets
DUCT_LIMIT = 0.52  # of the equatorial gyrofrequency; ducted whistlers stop at half (from memory)
DENSITY_SPREAD = 3.0  # factor either side of the climatology
NODE_COUNT = 32
L_STEP_KNOTS = 12
CHANNEL_HZ = 47.0  # width of a 21.3 ms channel


@dataclass(frozen=True)
class CurveFamily:
    """One-hop delays at one L, to be read off at any density.

    Parameters
    ----------
    l_value : float
        Field line.
    top_hz : float
        Highest frequency of the curves.
    log_density : ndarray, shape (d,)
        ln of density in m^-3, ascending.
    log_frequency : ndarray, shape (f,)
        ln of frequency in Hz, ascending.
    log_time : ndarray, shape (d, f)
        ln of the one-hop travel time in s.
    """

    l_value: float
    top_hz: float
    log_density: NDArray[np.float64]
    log_frequency: NDArray[np.float64]
    log_time: NDArray[np.float64]

    def delays_s(
        self, frequency_hz: NDArray[np.float64], density_m3: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Return travel times, shape (densities, frequencies); NaN above `top_hz`."""
        by_density = CubicSpline(self.log_density, self.log_time)(np.log(density_m3))
        log_time = CubicSpline(self.log_frequency, by_density, axis=1)(np.log(frequency_hz))
        return np.where(frequency_hz <= self.top_hz, np.exp(log_time), np.nan)


@dataclass(frozen=True)
class Bank:
    """Curves of the search.

    Parameters
    ----------
    l_value, density_m3 : ndarray, shape (t,)
        Field line and one-hop-equivalent density of each template.
    top_hz : ndarray, shape (t,)
        Highest frequency of each curve.
    delay_s : ndarray, shape (t, f)
        Delay relative to the reference frequency; NaN above `top_hz`.
    frequency_hz : ndarray, shape (f,)
        Frequencies of `delay_s`.
    """

    l_value: NDArray[np.float64]
    density_m3: NDArray[np.float64]
    top_hz: NDArray[np.float64]
    delay_s: NDArray[np.float64]
    frequency_hz: NDArray[np.float64]

    def __len__(self) -> int:
        """Return the number of templates."""
        return len(self.l_value)


def curve_family(
    l_value: float,
    model: FieldLineModel,
    *,
    band_hz: tuple[float, float],
    max_hops: int,
) -> CurveFamily:
    """Return the delays at one L over all densities the search allows.

    Parameters
    ----------
    l_value : float
        Field line.
    model : fieldlines.FieldLineModel
        Field, profile and ions.
    band_hz : tuple of float
        Lowest and highest frequency wanted.
    max_hops : int
        Highest number of crossings: sets the largest equivalent density.

    Returns
    -------
    CurveFamily
        Ready to be read at any density inside the range.
    """
    gyro_hz = maximum_frequency(l_value, model=model)
    # The reference frequency is always reachable, if need be beyond the duct limit.
    top_hz = min(band_hz[1], DUCT_LIMIT * gyro_hz)
    reach_hz = max(top_hz, min(1.05 * REFERENCE_HZ, 0.9 * gyro_hz))
    middle = float(np.log(saturated_density(l_value)))
    spread = np.log(DENSITY_SPREAD)
    log_density = np.linspace(middle - spread, middle + spread + 2 * np.log(max_hops), 12)
    log_frequency = np.linspace(np.log(0.95 * band_hz[0]), np.log(reach_hz), NODE_COUNT)
    time_s = travel_time(
        np.exp(log_frequency),
        l_value=l_value,
        equatorial_density_m3=np.exp(log_density),
        model=model,
    )
    return CurveFamily(l_value, top_hz, log_density, log_frequency, np.log(time_s))


def _spacing(
    family: CurveFamily, band_hz: tuple[float, float], width_s: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Metric of neighbouring densities: (densities, sum of squared lost-power weights)."""
    density = np.exp(np.linspace(family.log_density[0], family.log_density[-1], 24))
    frequency_hz = np.linspace(band_hz[0], min(band_hz[1], family.top_hz), 60)
    delay = family.delays_s(frequency_hz, density)
    slope = np.abs(np.gradient(delay, frequency_hz, axis=1))
    weight = 1.0 / _cell_s2(slope, width_s)
    change = np.gradient(delay, np.log(density), axis=0)
    change -= (change * weight).sum(axis=1, keepdims=True) / weight.sum(axis=1, keepdims=True)
    return density, np.pi * np.mean(change**2 * weight, axis=1)


def build_bank(
    model: FieldLineModel,
    *,
    l_range: tuple[float, float],
    band_hz: tuple[float, float],
    max_hops: int,
    loss: float,
    width_s: float,
    frequency_hz: NDArray[np.float64],
) -> Bank:
    r"""Return curves so close that a whistler between them keeps `1 - loss` of its power.

    Parameters
    ----------
    model : fieldlines.FieldLineModel
        Field, profile and ions.
    l_range : tuple of float
        Smallest and largest L.
    band_hz : tuple of float
        Lowest and highest frequency of the search.
    max_hops : int
        Highest number of crossings.
    loss : float
        Worst share of power lost between templates, 0 to 1.
    width_s : float
        Time resolution of the spectrogram that will be searched.
    frequency_hz : ndarray, shape (f,)
        Where the delays are wanted.

    Returns
    -------
    Bank
        All templates.

    Notes
    -----
    A neighbour off by :math:`d\tau(f)` keeps the mean over the band of
    :math:`\exp[-\pi (d\tau/dt_c)^2]`, with :math:`dt_c^2 = |d\tau/df|` widened by the window. To
    second order that is a metric, and a square lattice of it has spacing
    :math:`2\sqrt{loss/2}` along each axis (Owen 1996 for the construction; the cell width from
    first principles).
    """
    step = 2.0 * np.sqrt(loss / 2.0)
    knots = np.linspace(*l_range, L_STEP_KNOTS)
    steps = [_l_step(float(k), model, band_hz=band_hz, step=step, width_s=width_s) for k in knots]
    rows: list[tuple[float, float, float]] = []
    curves: list[NDArray[np.float64]] = []
    l_value = l_range[0]
    while l_value <= l_range[1]:
        family = curve_family(l_value, model, band_hz=band_hz, max_hops=max_hops)
        density, metric = _spacing(family, band_hz, width_s)
        chosen = _lattice(density, metric, step)
        curves.append(_relative_delays(family, frequency_hz, chosen))
        rows += [(l_value, value, family.top_hz) for value in chosen]
        l_value += float(np.interp(l_value, knots, steps))
    table = np.array(rows)
    return Bank(table[:, 0], table[:, 1], table[:, 2], np.concatenate(curves), frequency_hz)


def _relative_delays(
    family: CurveFamily, frequency_hz: NDArray[np.float64], density_m3: NDArray[np.float64]
) -> NDArray[np.float64]:
    reference_hz = np.array([min(REFERENCE_HZ, np.exp(family.log_frequency[-1]))])
    wide = CurveFamily(
        family.l_value, np.inf, family.log_density, family.log_frequency, family.log_time
    )
    return np.asarray(
        family.delays_s(frequency_hz, density_m3) - wide.delays_s(reference_hz, density_m3)
    )


def _cell_s2(slope_s_hz: NDArray[np.float64], width_s: float) -> NDArray[np.float64]:
    """Squared time over which a trace of this slope fills one channel."""
    return slope_s_hz + width_s**2 + (CHANNEL_HZ * slope_s_hz) ** 2


def _lattice(
    density_m3: NDArray[np.float64], metric: NDArray[np.float64], step: float
) -> NDArray[np.float64]:
    """Densities one metric step apart."""
    log_density = np.log(density_m3)
    distance = np.concatenate(
        [[0.0], np.cumsum(0.5 * np.sqrt(metric[1:]) + 0.5 * np.sqrt(metric[:-1]))]
    ) * (log_density[1] - log_density[0])
    count = max(2, int(np.ceil(distance[-1] / step)) + 1)
    places = np.linspace(0.0, distance[-1], count)
    return np.asarray(np.exp(np.interp(places, distance, log_density)))


def _l_step(
    l_value: float,
    model: FieldLineModel,
    *,
    band_hz: tuple[float, float],
    step: float,
    width_s: float,
) -> float:
    """L step that loses as much as one density step, once density and time are re-fitted."""
    near = [
        curve_family(value, model, band_hz=band_hz, max_hops=3)
        for value in (l_value, l_value * 1.01)
    ]
    top_hz = min(band_hz[1], near[0].top_hz, near[1].top_hz)
    frequency_hz = np.linspace(band_hz[0], top_hz, 60)
    density = saturated_density(l_value) * np.array([1.0, 1.02]) * 4.0
    base = near[0].delays_s(frequency_hz, density)
    other = near[1].delays_s(frequency_hz, density[:1])[0]
    slope = np.abs(np.gradient(base[0], frequency_hz))
    weight = 1.0 / _cell_s2(slope, width_s)
    design = np.stack([np.ones_like(frequency_hz), (base[1] - base[0]) / 0.02], axis=1)
    root = np.sqrt(weight)
    change = (other - base[0]) / 0.01
    fit, *_ = np.linalg.lstsq(design * root[:, None], change * root, rcond=None)
    left = change - design @ fit
    metric = np.pi * np.mean(left**2 * weight)
    return float(np.clip(l_value * step / np.sqrt(max(metric, 1e-9)), 0.004, 0.3))
