"""What a stroke's traces say about L, density and time: residuals and their derivatives.

The unknowns are ln L and ln density of each path, the lightning time in milliseconds, for each
trace where it lies within its thickness, and, when asked for, what the model leaves open, both in
sigmas of that: every one of order one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fieldlines import FieldLineModel, saturated_density, travel_time_jacobian
from fieldlines.constants import EARTH_RADIUS_M, SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray
from whistler.scatter import COUNT, ModelScatter
from whistler.trace import Trace

TIME_UNIT_S = 1e-3
L_LIMITS = (1.25, 7.5)
DENSITY_LIMIT = (
    1000.0  # factor either side of the climatology at L 3.2: troughs, and five hops as one
)
MIDDLE_L = 3.2


@dataclass(frozen=True)
class PathTrace:
    """A trace with its place in a stroke.

    Parameters
    ----------
    trace : Trace
        The points.
    hops : int
        Field-line crossings.
    path : int
        Index of the path; hops of one echo train share it.
    centre_share_sd : float
        One-sigma, as a share of the travel time, of where the trace lies within its thickness.
    """

    trace: Trace
    hops: int
    path: int
    centre_share_sd: float = 0.0


@dataclass(frozen=True)
class SfericTime:
    """The causative sferic's arrival at the receiver.

    Parameters
    ----------
    time_s : float
        From the recording's first frame.
    sd_s : float
        One-sigma of reading it.
    odd_hops : bool
        Whether the stroke was in the conjugate hemisphere.
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver, when it is known.
    place_sd_s : float
        One-sigma of its way from not knowing where the stroke was. The fit leans on the sferic only
        so much; what comes of it is in the profile part of the errors, not in the statistical one.
    """

    time_s: float
    sd_s: float
    odd_hops: bool
    receiver_latitude_rad: float | None = None
    place_sd_s: float = 0.0


@dataclass(frozen=True)
class Ties:
    """What is known beside the traces; every tie adds one residual.

    Parameters
    ----------
    sferic : SfericTime, optional
        The causative sferic.
    lightning_time_s : tuple of float, optional
        Time of the lightning itself with its one-sigma, from the recording's first frame.
    l_value : float, optional
        L to hold every path at.
    density_prior_dex : float, optional
        One-sigma, in decades, of the density about the climatology at the fitted L.
    density_prior_factor : float
        What the climatology is multiplied with.
    """

    sferic: SfericTime | None = None
    lightning_time_s: tuple[float, float] | None = None
    l_value: float | None = None
    density_prior_dex: float | None = None
    density_prior_factor: float = 1.0


FREE = Ties()
HELD = 1e-5  # one-sigma, in ln L, of an L that is given


def sferic_path_s(
    l_value: float | FloatArray, *, receiver_latitude_rad: float | None = None
) -> float:
    r"""Return how much later than the whistler's start the sferic comes from the conjugate foot, s.

    Parameters
    ----------
    l_value : float or ndarray
        Field line; several are averaged first.
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver; without it the receiver stands at the near foot.

    Returns
    -------
    float
        ``2 Lambda RE / c`` with ``cos(Lambda)**2 = 1 / L``, Lambda no larger than the receiver's
        latitude.

    Notes
    -----
    A receiver at latitude :math:`\lambda` on the meridian of the path hears the sferic after
    :math:`(\Lambda + \lambda) R_E / c` and everything of the whistler
    :math:`|\Lambda - \lambda| R_E / c` late; the difference is
    :math:`2 \min(\Lambda, \lambda) R_E / c`.

    Examples
    --------
    >>> f"{1e3 * sferic_path_s(2.2):.1f} ms"
    '35.3 ms'
    """
    latitude_rad = float(np.arccos(float(np.mean(l_value)) ** -0.5))
    if receiver_latitude_rad is not None:
        latitude_rad = min(latitude_rad, abs(receiver_latitude_rad))
    return float(2.0 * latitude_rad * EARTH_RADIUS_M / SPEED_OF_LIGHT_M_S)


def _unit(size: int, at: int) -> FloatArray:
    vector = np.zeros(size)
    vector[at] = 1.0
    return vector


def _tie(misfit: float, by_x: FloatArray, sd: float) -> tuple[FloatArray, FloatArray]:
    return np.array([misfit / sd]), -by_x[None, :] / sd


def sferic_at(
    log_l: FloatArray,
    lightning_time_s: float,
    *,
    odd_hops: bool,
    receiver_latitude_rad: float | None = None,
) -> tuple[float, FloatArray]:
    """Return when the causative sferic reaches the receiver, and its derivatives.

    Parameters
    ----------
    log_l : ndarray, shape (paths,)
        ln L of the stroke's paths.
    lightning_time_s : float
        Time of the stroke.
    odd_hops : bool
        Whether it was in the conjugate hemisphere; else it was beside the receiver.
    receiver_latitude_rad : float, optional
        Geomagnetic latitude of the receiver.

    Returns
    -------
    float
        Arrival, on the clock of `lightning_time_s`.
    ndarray, shape (2 paths + 1,)
        Derivatives with respect to ln L and ln density, path by path, and the time.
    """
    by_x = _unit(2 * len(log_l) + 1, -1)
    if not odd_hops:
        return lightning_time_s, by_x
    l_values = np.exp(log_l)
    mean_l = float(l_values.mean())
    way_s = sferic_path_s(mean_l, receiver_latitude_rad=receiver_latitude_rad)
    if way_s == sferic_path_s(mean_l):  # the foot, not the receiver, sets the way
        by_l = EARTH_RADIUS_M / SPEED_OF_LIGHT_M_S / (mean_l * np.sqrt(mean_l - 1.0))
        by_x[0:-1:2] = by_l * l_values / len(l_values)
    return lightning_time_s + way_s, by_x


def expected_log_density(log_l: float, *, factor: float = 1.0) -> tuple[float, float]:
    """Return ln of the climatology's density in m^-3 at ln L, and its derivative in ln L.

    Parameters
    ----------
    log_l : float
        ln L.
    factor : float
        What the climatology is multiplied with.

    Examples
    --------
    >>> expected, slope = expected_log_density(np.log(4.0))
    >>> f"{np.exp(expected) / 1e6:.0f} per cm^3, to the power {slope:.1f} of L"
    '443 per cm^3, to the power -2.9 of L'
    """
    expected = float(np.log(saturated_density(np.exp(log_l))))
    # Over a step that the climatology's exponential law allows.
    above = float(np.log(saturated_density(1.001 * np.exp(log_l))))
    return expected + float(np.log(factor)), float((above - expected) / np.log(1.001))


class StrokeProblem:
    """Residuals and Jacobian of one stroke in scaled unknowns.

    Parameters
    ----------
    traces : sequence of PathTrace
        What was measured.
    ties : Ties
        What else is known.
    model : fieldlines.FieldLineModel
        Field, profile and ions.
    epoch_s : float
        Zero of the lightning time, from the recording's first frame.
    scatter : ModelScatter, optional
        What of the model is to be fitted too; by default it is taken as it is.
    """

    def __init__(
        self,
        traces: Sequence[PathTrace],
        ties: Ties,
        model: FieldLineModel,
        epoch_s: float,
        scatter: ModelScatter | None = None,
    ) -> None:
        self.traces = traces
        self.ties = ties
        self.model = model
        self.epoch_s = epoch_s
        self.scatter = scatter
        self.paths = 1 + max(item.path for item in traces)
        self.clock = 2 * self.paths  # place of the time among the unknowns; trace centres follow
        self.open = self.clock + 1 + len(traces)  # place of what the model leaves open
        self.size = self.open + (COUNT if scatter else 0)
        self.kept = [np.ones(len(item.trace.time_s), bool) for item in traces]
        self._last: tuple[FloatArray, FloatArray, FloatArray] | None = None

    def residual(self, x: FloatArray) -> FloatArray:
        """Return the residuals, in sigmas, at the unknowns `x`."""
        return self.evaluate(x)[0]

    def jacobian(self, x: FloatArray) -> FloatArray:
        """Return their derivatives, shape (residuals, unknowns)."""
        return self.evaluate(x)[1]

    def evaluate(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Residuals in sigmas and their derivatives; the solver asks for one after the other."""
        if self._last is None or not np.array_equal(self._last[0], x):
            self._last = (x.copy(), *self._evaluate(x))
        return self._last[1], self._last[2]

    def keep(self, kept: list[NDArray[np.bool_]]) -> None:
        """Use only these points of each trace from now on."""
        self.kept = kept
        self._last = None

    def used(self) -> tuple[PathTrace, ...]:
        """Return the traces with only the points that are kept."""
        return tuple(
            replace(item, trace=item.trace.only(kept))
            for item, kept in zip(self.traces, self.kept, strict=True)
        )

    def rms_s(self, x: FloatArray) -> FloatArray:
        """Return the root mean square of trace minus model, each without its own shift."""
        unshifted = x.copy()
        unshifted[self.clock + 1 : self.open] = 0.0
        time_s = self.epoch_s + x[self.clock] * TIME_UNIT_S
        return np.array(
            [
                np.sqrt(
                    np.mean(
                        (
                            self._trace_part(number, kept, unshifted, time_s)[0]
                            * self.traces[number].trace.time_sd_s[kept]
                        )
                        ** 2
                    )
                )
                for number, kept in enumerate(self.kept)
            ]
        )

    def _evaluate(self, x: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Traces first, then where each lies within its thickness and the model, then ties."""
        time_s = self.epoch_s + x[self.clock] * TIME_UNIT_S
        parts = [self._trace_part(number, kept, x, time_s) for number, kept in enumerate(self.kept)]
        centres = np.arange(self.clock + 1, self.size)
        parts.append((x[centres], np.eye(self.size)[centres]))
        parts += self._tie_parts(x, time_s)
        return np.concatenate([part[0] for part in parts]), np.concatenate(
            [part[1] for part in parts]
        )

    def _trace_part(
        self, number: int, kept: NDArray[np.bool_], x: FloatArray, time_s: float
    ) -> tuple[FloatArray, FloatArray]:
        item = self.traces[number]
        trace, first, centre = item.trace, 2 * item.path, self.clock + 1 + number
        frequency_hz = trace.frequency_hz[kept]
        l_value, density_m3 = (float(value) for value in np.exp(x[first : first + 2]))
        model = self.model_at(x)
        delay = travel_time_jacobian(
            frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
        )
        sd = trace.time_sd_s[kept]
        row = np.zeros((len(sd), len(x)))
        stretch = item.hops * (1.0 + item.centre_share_sd * x[centre])
        row[:, first : first + 2] = -stretch * delay.jacobian[:, :2] / sd[:, None]
        row[:, self.clock] = -TIME_UNIT_S / sd
        row[:, centre] = -item.hops * item.centre_share_sd * delay.time_s / sd
        if self.scatter is not None:
            by_open = self.scatter.delay_changes_s(delay, model)
            row[:, self.open :] = -stretch * by_open / sd[:, None]
        return (trace.time_s[kept] - time_s - stretch * delay.time_s) / sd, row

    def _tie_parts(self, x: FloatArray, time_s: float) -> list[tuple[FloatArray, FloatArray]]:
        ties, parts = self.ties, []
        if ties.sferic is not None:
            predicted_s, slope = sferic_at(
                x[0 : self.clock : 2],
                time_s,
                odd_hops=ties.sferic.odd_hops,
                receiver_latitude_rad=ties.sferic.receiver_latitude_rad,
            )
            by_x = np.pad(slope, (0, self.size - len(slope)))
            by_x[self.clock] *= TIME_UNIT_S
            sd_s = float(np.hypot(ties.sferic.sd_s, ties.sferic.place_sd_s))
            parts.append(_tie(ties.sferic.time_s - predicted_s, by_x, sd_s))
        if ties.lightning_time_s is not None:
            wanted_s, sd_s = ties.lightning_time_s
            parts.append(_tie(wanted_s - time_s, TIME_UNIT_S * _unit(self.size, self.clock), sd_s))
        for path in range(self.paths):
            first = 2 * path
            if ties.l_value is not None:
                parts.append(_tie(np.log(ties.l_value) - x[first], _unit(self.size, first), HELD))
            if ties.density_prior_dex is not None:
                expected, by_l = expected_log_density(x[first], factor=ties.density_prior_factor)
                by_x = _unit(self.size, first + 1) - by_l * _unit(self.size, first)
                sd = ties.density_prior_dex * np.log(10.0)
                parts.append(_tie(expected - x[first + 1], by_x, sd))
        return parts

    def model_at(self, x: FloatArray) -> FieldLineModel:
        """Return the model at the unknowns `x`."""
        return self.scatter.moved(self.model, x[self.open :]) if self.scatter else self.model

    def limits(self) -> tuple[FloatArray, FloatArray]:
        """Return the lowest and highest value of each unknown; L keeps the traces below fHeq."""
        low = np.full(self.size, -np.inf)
        high = np.full(self.size, np.inf)
        for item in self.traces:
            top_hz = float(item.trace.frequency_hz.max())
            reach = float(self.model.dipole.l_from_equatorial_gyrofrequency(1.08 * top_hz))
            low[2 * item.path] = np.log(L_LIMITS[0])
            high[2 * item.path] = min(high[2 * item.path], np.log(min(L_LIMITS[1], reach)))
            middle = float(np.log(saturated_density(MIDDLE_L)))
            low[2 * item.path + 1] = middle - np.log(DENSITY_LIMIT)
            high[2 * item.path + 1] = middle + np.log(DENSITY_LIMIT)
        if self.scatter is not None:
            low[self.open :], high[self.open :] = self.scatter.limits(self.model)
        return low, high
