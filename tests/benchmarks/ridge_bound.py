"""The bound that plain ridge picks set to L, density and time of one whistler.

    python -m tests.benchmarks.ridge_bound

prints it for the default model, and beside the bounds worked out elsewhere in a simpler model (the
quasi-longitudinal index, electrons only, nothing below 1000 km), which it reproduces.

A matched time-frequency cell of a trace t(f) is as wide as its slope allows, b = |t'|**-1/2, and
near the nose as its curvature allows, (3 / |t''|)**1/3, at most 1 kHz. One cell, with nothing known
of the phase in its neighbours, times the trace to sqrt(3) / (pi b rho) with rho**2 twice its signal
over noise power: hence the Fisher matrix is the integral of rho2 (pi b)**2 / 3 over frequency, rho2
per Hz, times the derivatives of t. The spectrum is flat after whitening, and the stated strength is
the mean over the cells: rho2 = 2 snr (cells) / (band).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from fieldlines import CentredDipole, FieldLineModel, saturated_density, travel_time_jacobian
from fieldlines.errors import FloatArray
from fieldlines.traveltime import quasi_longitudinal_travel_time

WIDEST_CELL_HZ = 1000.0
NODES = 801
STEP = 1e-5  # of ln L and ln density, where a derivative is taken by differences


class RidgeBound(NamedTuple):
    """One-sigmas: of L and density as shares of themselves, of the lightning time in s."""

    l_sd_relative: float
    density_sd_relative: float
    time_sd_s: float


@dataclass(frozen=True)
class Ridge:
    """A trace cut into matched cells.

    Parameters
    ----------
    frequency_hz : ndarray, shape (n,)
        Evenly spaced over the band.
    time_s : ndarray, shape (n,)
        Travel time.
    jacobian : ndarray, shape (n, 2)
        Its derivatives with respect to ln L and ln density, s.
    cell_hz : ndarray, shape (n,)
        Width of the matched cell there.
    """

    frequency_hz: FloatArray
    time_s: FloatArray
    jacobian: FloatArray
    cell_hz: FloatArray

    @property
    def cells(self) -> float:
        """How many matched cells the trace holds."""
        return float(np.trapezoid(1.0 / self.cell_hz, self.frequency_hz))

    def information_s2(self, snr_db: float) -> FloatArray:
        """Information on the time per Hz, s^-2 Hz^-1, at a mean strength of the cells."""
        band_hz = self.frequency_hz[-1] - self.frequency_hz[0]
        power_per_hz = 2.0 * 10.0 ** (snr_db / 10.0) * self.cells / band_hz
        return np.asarray(power_per_hz * (math.pi * self.cell_hz) ** 2 / 3.0)

    def picks(self, snr_db: float) -> tuple[FloatArray, FloatArray]:
        """Frequencies a cell apart (a whole number fits the band), Hz, and a pick's sigma, s."""
        count = np.concatenate(
            [[0.0], np.cumsum(np.diff(self.frequency_hz) * 0.5 * self._cell_sums())]
        )
        step = count[-1] / round(count[-1])
        middle = step * (np.arange(round(count[-1])) + 0.5)
        frequency_hz = np.interp(middle, count, self.frequency_hz)
        each = np.interp(
            frequency_hz, self.frequency_hz, self.information_s2(snr_db) * self.cell_hz
        )
        return frequency_hz, (step * each) ** -0.5

    def _cell_sums(self) -> FloatArray:
        per_hz = 1.0 / self.cell_hz
        return np.asarray(per_hz[1:] + per_hz[:-1])


def ridge(
    *,
    l_value: float,
    density_m3: float,
    band_hz: tuple[float, float],
    model: FieldLineModel,
    hops: int = 1,
    quasi_longitudinal: bool = False,
) -> Ridge:
    """Cut the trace of a path into its matched cells; `band_hz` lies below the gyrofrequency."""
    frequency_hz = np.linspace(*band_hz, NODES)
    if quasi_longitudinal:
        time_s, jacobian = quasi_longitudinal_delay(frequency_hz, l_value, density_m3, model)
    else:
        delay = travel_time_jacobian(
            frequency_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model
        )
        time_s, jacobian = delay.time_s, delay.jacobian[:, :2]
    time_s, jacobian = hops * time_s, hops * jacobian
    slope = np.gradient(time_s, frequency_hz, edge_order=2)
    bend = np.gradient(slope, frequency_hz, edge_order=2)
    by_slope = np.abs(slope) ** -0.5
    by_bend = np.cbrt(3.0 / np.abs(bend))
    cell_hz = np.minimum(np.minimum(by_slope, by_bend), WIDEST_CELL_HZ)
    return Ridge(frequency_hz, time_s, jacobian, cell_hz)


def quasi_longitudinal_delay(
    frequency_hz: FloatArray, l_value: float, density_m3: float, model: FieldLineModel
) -> tuple[FloatArray, FloatArray]:
    """Travel time and its derivatives in ln L and ln density with the approximate index."""

    def time_s(l_factor: float = 1.0, density_factor: float = 1.0) -> FloatArray:
        return quasi_longitudinal_travel_time(
            frequency_hz,
            l_value=l_value * l_factor,
            equatorial_density_m3=density_m3 * density_factor,
            model=model,
        )

    more, less = math.exp(STEP), math.exp(-STEP)
    by_l = (time_s(more) - time_s(less)) / (2.0 * STEP)
    by_density = (time_s(1.0, more) - time_s(1.0, less)) / (2.0 * STEP)
    return time_s(), np.column_stack([by_l, by_density])


def ridge_fisher(trace: Ridge, snr_db: float) -> FloatArray:
    """Fisher matrix of ln L, ln density and lightning time (s), shape (3, 3)."""
    slopes = np.column_stack([trace.jacobian, np.ones_like(trace.time_s)])
    weight = trace.information_s2(snr_db)[:, None, None]
    return np.asarray(
        np.trapezoid(weight * slopes[:, :, None] * slopes[:, None, :], trace.frequency_hz, axis=0)
    )


def ridge_bound(
    *,
    l_value: float,
    density_m3: float,
    band_hz: tuple[float, float],
    snr_db: float,
    time_known: bool,
    model: FieldLineModel,
) -> RidgeBound:
    """Return the smallest one-sigmas that ridge picks of one trace allow.

    Parameters
    ----------
    l_value, density_m3 : float
        The path.
    band_hz : tuple of float
        Lowest and highest frequency of the trace, Hz.
    snr_db : float
        Mean over the matched cells of signal power over noise power, dB.
    time_known : bool
        Whether the time of the lightning is known; else it is a third unknown.
    model : fieldlines.FieldLineModel
        Field, profile and ions, taken as exact.

    Returns
    -------
    RidgeBound
        Sigma of the time is 0 when it is known.
    """
    trace = ridge(l_value=l_value, density_m3=density_m3, band_hz=band_hz, model=model)
    return bound_of(trace, snr_db=snr_db, time_known=time_known)


def bound_of(trace: Ridge, *, snr_db: float, time_known: bool) -> RidgeBound:
    """The same of a trace already cut into cells."""
    fisher = ridge_fisher(trace, snr_db)
    if time_known:
        sd = np.append(np.sqrt(np.diag(np.linalg.inv(fisher[:2, :2]))), 0.0)
    else:
        sd = np.sqrt(np.diag(np.linalg.inv(fisher)))
    return RidgeBound(*(float(value) for value in sd))


#: L: sigma of L and of density in per cent at 10 dB over 1-10 kHz and over 2-8 kHz, time free and
#: known; and the number of cells. Worked out outside this project (see the module's first lines).
REFERENCE = {
    (1e3, 10e3): {
        2.2: (1.01, 5.4, 0.21, 1.29, 73),
        2.5: (0.41, 2.0, 0.10, 0.64, 81),
        3.0: (0.079, 0.26, 0.031, 0.21, 89),
        3.5: (0.014, 0.17, 0.011, 0.091, 89),
        4.0: (0.015, 0.21, 0.012, 0.098, 75),
        4.5: (0.017, 0.29, 0.014, 0.11, 59),
    },
    (2e3, 8e3): {
        2.2: (2.9, 15.7, 0.40, 2.5, 46),
        2.5: (1.2, 5.9, 0.20, 1.24, 52),
        3.0: (0.28, 0.93, 0.070, 0.45, 57),
        3.5: (0.035, 0.28, 0.018, 0.14, 53),
        4.0: (0.017, 0.43, 0.015, 0.12, 47),
        4.5: (0.020, 0.86, 0.020, 0.16, 31),
    },
}


def reference_model() -> FieldLineModel:
    """The simpler model: equatorial gyrofrequency 873.6 kHz / L^3, electrons above 1000 km."""
    dipole = CentredDipole(3.1208e-5, "873.6 kHz at the ground")
    return FieldLineModel(dipole, layer=None, ions=None, foot_altitude_m=1000e3)


def percent(
    l_value: float,
    band_hz: tuple[float, float],
    model: FieldLineModel,
    *,
    quasi_longitudinal: bool = False,
) -> list[float]:
    """L and density at 10 dB, time free, then known, per cent; then the cells."""
    half_hz = 0.5 * model.dipole.equatorial_gyrofrequency(l_value)
    trace = ridge(
        l_value=l_value,
        density_m3=float(saturated_density(l_value)),
        band_hz=(band_hz[0], min(band_hz[1], half_hz)),
        model=model,
        quasi_longitudinal=quasi_longitudinal,
    )
    values = []
    for known in (False, True):
        bound = bound_of(trace, snr_db=10.0, time_known=known)
        values += [100.0 * bound.l_sd_relative, 100.0 * bound.density_sd_relative]
    return [*values, trace.cells]


def main() -> None:
    """Print the bounds."""
    simple, default = reference_model(), FieldLineModel(CentredDipole.from_date(2025.0))
    for band_hz, table in REFERENCE.items():
        print(f"\n{band_hz[0]:.0f}-{band_hz[1]:.0f} Hz, 10 dB; sigma of L / n, per cent")
        print("   L      time free              time known           cells")
        for l_value, wanted in table.items():
            for name, values in (
                ("worked out elsewhere", list(wanted)),
                ("  here", percent(l_value, band_hz, simple, quasi_longitudinal=True)),
                ("  here, exact index", percent(l_value, band_hz, simple)),
                ("  here, default model", percent(l_value, band_hz, default)),
            ):
                shown = " ".join(f"{value:9.3g}" for value in values)
                print(f"{l_value:5.1f} {shown}  {name}")


if __name__ == "__main__":
    main()
