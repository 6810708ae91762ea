"""What a path of given L and density does to a whistler: the forward model, with its figure."""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fieldlines.line import FieldLineModel
from fieldlines.nose import nose, zero_frequency_dispersion
from fieldlines.traveltime import maximum_frequency, travel_time
from fieldlines.tube import tube_content
from whistler.errors import Notice, UsageError
from whistler.rows import TIME_DECIMALS, plain
from whistler.savefile import write_whole

if TYPE_CHECKING:
    from matplotlib.axes import Axes

FREQUENCY_STEP_HZ = 500.0
HIGHEST_DEFAULT_HZ = 10_000.0
CURVE_POINTS = 200  # of the figure, however few frequencies the table has
USABLE_SHARE = 0.95  # of the smallest gyrofrequency on the path, for the default frequencies
FIGURE_ENDINGS = (".png", ".pdf", ".svg")
CM3_PER_M3 = 1e6


@dataclass(frozen=True)
class Prediction:
    """Travel times and derived quantities of one path.

    Parameters
    ----------
    l_value : float
        L of the path.
    density_cm3 : float
        Equatorial electron density, cm^-3.
    hops : int
        Field-line crossings that `time_s` covers.
    frequency_hz, time_s : ndarray, shape (n,)
        Frequencies, and arrival after the lightning.
    curve_hz, curve_s : ndarray, shape (200,)
        The same, closely over the range of those frequencies, for the figure.
    nose_frequency_hz, nose_time_s : float
        Nose of one hop; NaN when it lies beyond the model's validity.
    dispersion_s_sqrt_hz : float
        Zero-frequency dispersion of one hop.
    equatorial_gyrofrequency_hz : float
        Electron gyrofrequency at the equator, Hz.
    tube_content_m2 : float
        Electrons above 1000 km in one hemisphere per unit area at 1000 km, m^-2.
    """

    l_value: float
    density_cm3: float
    hops: int
    frequency_hz: NDArray[np.float64]
    time_s: NDArray[np.float64]
    curve_hz: NDArray[np.float64]
    curve_s: NDArray[np.float64]
    nose_frequency_hz: float
    nose_time_s: float
    dispersion_s_sqrt_hz: float
    equatorial_gyrofrequency_hz: float
    tube_content_m2: float

    def to_dict(self) -> dict[str, Any]:
        """Return the results as plain values; undetermined numbers are None."""
        return {
            "frequency_hz": [plain(value) for value in self.frequency_hz],
            "time_s": [plain(value, decimals=TIME_DECIMALS) for value in self.time_s],
            "nose_frequency_hz": plain(self.nose_frequency_hz),
            "nose_time_s": plain(self.nose_time_s, decimals=TIME_DECIMALS),
            "dispersion_s_sqrt_hz": plain(self.dispersion_s_sqrt_hz),
            "equatorial_gyrofrequency_hz": plain(self.equatorial_gyrofrequency_hz),
            "tube_content_m2": plain(self.tube_content_m2),
        }


def predict_path(
    l_value: float,
    *,
    density_cm3: float,
    model: FieldLineModel,
    hops: int = 1,
    frequencies_hz: Sequence[float] | None = None,
) -> Prediction:
    """Return what a path does to a whistler.

    Parameters
    ----------
    l_value : float
        L of the path, 1.2 to 8.
    density_cm3 : float
        Equatorial electron density, cm^-3.
    model : FieldLineModel
        Everything else.
    hops : int
        Field-line crossings.
    frequencies_hz : sequence of float, optional
        Frequencies, Hz; by default every 500 Hz to 10 kHz or nearly to the gyrofrequency.

    Returns
    -------
    Prediction

    Raises
    ------
    DomainError
        When L, density or a frequency is outside the range of the physics.

    Examples
    --------
    >>> from fieldlines import CentredDipole
    >>> model = FieldLineModel(CentredDipole.from_date(2025.0))
    >>> path = predict_path(3.0, density_cm3=900.0, model=model, frequencies_hz=[5000.0])
    >>> f"{path.time_s[0]:.1f} s"
    '1.2 s'
    """
    gyrofrequency_hz = maximum_frequency(l_value, model=model)
    if frequencies_hz is None:
        highest = min(HIGHEST_DEFAULT_HZ, USABLE_SHARE * gyrofrequency_hz)
        frequencies = np.arange(FREQUENCY_STEP_HZ, highest + 1.0, FREQUENCY_STEP_HZ)
    else:
        frequencies = np.asarray(frequencies_hz, dtype=float)
    density_m3 = density_cm3 * CM3_PER_M3
    one_hop_s = travel_time(
        frequencies, l_value=l_value, equatorial_density_m3=density_m3, model=model
    )
    curve_hz = np.geomspace(frequencies.min(), frequencies.max(), CURVE_POINTS)
    curve_s = travel_time(curve_hz, l_value=l_value, equatorial_density_m3=density_m3, model=model)
    least = nose(l_value, equatorial_density_m3=density_m3, model=model)
    return Prediction(
        l_value=l_value,
        density_cm3=density_cm3,
        hops=hops,
        frequency_hz=frequencies,
        time_s=hops * one_hop_s,
        curve_hz=curve_hz,
        curve_s=hops * curve_s,
        nose_frequency_hz=least.frequency_hz,
        nose_time_s=least.time_s,
        dispersion_s_sqrt_hz=zero_frequency_dispersion(
            l_value, equatorial_density_m3=density_m3, model=model
        ),
        equatorial_gyrofrequency_hz=gyrofrequency_hz,
        tube_content_m2=tube_content(l_value, equatorial_density_m3=density_m3, model=model),
    )


def prediction_text(prediction: Prediction) -> str:
    """Return table and derived quantities for reading."""
    lines = [f"{'frequency Hz':>12}  {'time s':>10}"]
    lines += [
        f"{frequency:12.0f}  {time:10.4f}"
        for frequency, time in zip(prediction.frequency_hz, prediction.time_s, strict=True)
    ]
    nose_line = "none within the model's validity"
    if np.isfinite(prediction.nose_frequency_hz):
        nose_line = f"{prediction.nose_frequency_hz:.0f} Hz at {prediction.nose_time_s:.4f} s"
    return "\n".join(
        [
            *lines,
            "",
            f"path                  L {prediction.l_value:g}, {prediction.density_cm3:g} cm^-3, "
            f"times for {prediction.hops} hop{'s' if prediction.hops > 1 else ''}",
            f"nose (one hop)        {nose_line}",
            f"dispersion (one hop)  {prediction.dispersion_s_sqrt_hz:.2f} s Hz^(1/2)",
            f"gyrofrequency         {prediction.equatorial_gyrofrequency_hz:.0f} Hz at the equator",
            f"tube content          {prediction.tube_content_m2:.4g} m^-2 above 1000 km",
        ]
    )


def plot_prediction(prediction: Prediction, ax: Axes) -> Axes:
    """Return the axes after drawing arrival time against frequency, the nose marked."""
    label = f"L {prediction.l_value:g}, {prediction.density_cm3:g} cm$^{{-3}}$"
    ax.plot(prediction.curve_s, prediction.curve_hz / 1e3, color="#0072B2", label=label)
    if np.isfinite(prediction.nose_frequency_hz):
        nose_s = prediction.hops * prediction.nose_time_s
        ax.plot(nose_s, prediction.nose_frequency_hz / 1e3, "D", color="#D55E00", label="nose")
    ax.set_xlabel("time after the lightning (s)")
    ax.set_ylabel("frequency (kHz)")
    ax.legend(frameon=False)
    return ax


def save_prediction_figure(prediction: Prediction, path: Path) -> None:
    """Write the figure of a prediction; the ending of the name gives the format.

    Raises
    ------
    UsageError
        When the ending is none of .png, .pdf, .svg.
    OutputError
        When the file cannot be written.
    """
    if path.suffix.lower() not in FIGURE_ENDINGS:
        reason = f"ending {path.suffix!r} is not among {', '.join(FIGURE_ENDINGS)}"
        raise UsageError(Notice("E605", str(path), reason, "name the figure with one of those"))
    from matplotlib.figure import Figure

    figure = Figure(figsize=(6.4, 4.0), layout="constrained")
    plot_prediction(prediction, figure.add_subplot())
    content = io.BytesIO()
    figure.savefig(content, format=path.suffix[1:].lower(), dpi=150)
    write_whole(path, content.getvalue())
