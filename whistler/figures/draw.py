"""Drawing onto axes: each function takes data and an ``Axes`` and returns what it drew."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.ticker import MaxNLocator

from whistler.figures.style import (
    MAP,
    STRENGTH_DB,
    TEXT_PT,
    PathStyle,
    path_style,
    row_label,
)
from whistler.fit import model_curve
from whistler.rows import row_model

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.container import ErrorbarContainer
    from matplotlib.image import AxesImage
    from matplotlib.lines import Line2D
    from numpy.typing import NDArray

    from fieldlines import FieldLineModel
    from fieldlines.errors import FloatArray
    from whistler.rows import WhistlerRow
    from whistler.spectrogram import Spectrogram

TIME_LABEL = "time from the first sample (s)"
FREQUENCY_LABEL = "frequency (kHz)"
RESIDUAL_LABEL = "trace − model (ms)"
STRENGTH_LABEL = "power over noise (dB)"
VALID_SHARE = 0.5  # ducts guide up to this share of the equatorial gyrofrequency
MOST_COLUMNS = 3000  # of an image; more are averaged
CURVE_POINTS = 200
CURVE_PT = 0.9
LEAST_RESIDUAL_MS = 1.0
LEAST_POWER = 1e-3


def draw_spectrogram(
    view: Spectrogram, ax: Axes, *, time_limits_s: tuple[float, float] | None = None
) -> AxesImage:
    """Return the image of a spectrogram in dB over noise; axes are labelled and limited to it.

    Parameters
    ----------
    view : Spectrogram
        Normalised power.
    ax : matplotlib.axes.Axes
        Where to draw.
    time_limits_s : tuple of float, optional
        Stretch to show, s from the first frame; by default all.
    """
    times = view.time_s
    low_s, high_s = time_limits_s or (float(times[0]), float(times[-1]))
    first = int(np.clip(np.searchsorted(times, low_s) - 1, 0, len(times) - 1))
    last = int(np.clip(np.searchsorted(times, high_s) + 1, first + 1, len(times)))
    factor = math.ceil((last - first) / MOST_COLUMNS)
    power = _pooled(view.power[:, first:last], factor)
    begin_s = float(times[first]) - 0.5 * view.hop_s
    half_hz = 0.5 * float(view.frequency_hz[1] - view.frequency_hz[0])
    image = ax.imshow(
        10.0 * np.log10(np.maximum(power, LEAST_POWER)),
        origin="lower",
        aspect="auto",
        cmap=MAP,
        vmin=STRENGTH_DB[0],
        vmax=STRENGTH_DB[1],
        extent=(
            begin_s,
            begin_s + power.shape[1] * factor * view.hop_s,
            (float(view.frequency_hz[0]) - half_hz) / 1e3,
            (float(view.frequency_hz[-1]) + half_hz) / 1e3,
        ),
        rasterized=True,
    )
    ax.set_xlim(low_s, high_s)
    label_axes(ax, TIME_LABEL, FREQUENCY_LABEL)
    return image


def _pooled(power: NDArray[np.float32], factor: int) -> NDArray[np.float32]:
    """Mean of every `factor` columns; the last may average fewer."""
    if factor <= 1:
        return power
    starts = np.arange(0, power.shape[1], factor)
    counts = np.diff(np.append(starts, power.shape[1]))
    return np.asarray(np.add.reduceat(power, starts, axis=1) / counts, np.float32)


def label_axes(ax: Axes, x_label: str, *y_label: str) -> None:
    """Set labels and text sizes."""
    ax.set_xlabel(x_label, fontsize=TEXT_PT, labelpad=2.0)
    for label in y_label:
        ax.set_ylabel(label, fontsize=TEXT_PT, labelpad=3.0)
    ax.tick_params(labelsize=TEXT_PT)


def draw_trace(row: WhistlerRow, ax: Axes, *, style: PathStyle) -> Line2D:
    """Return the points of a row's trace."""
    (points,) = ax.plot(
        row.trace.time_s,
        row.trace.frequency_hz / 1e3,
        linestyle="none",
        marker=style.marker,
        markersize=4.4,
        color=style.colour,
        markeredgecolor="white",
        markeredgewidth=0.5,
        label=row_label(row),
        zorder=4,
    )
    return points


def draw_curve(
    row: WhistlerRow,
    ax: Axes,
    *,
    model: FieldLineModel,
    style: PathStyle,
    band_hz: tuple[float, float],
) -> list[Line2D]:
    """Return a row's fitted curve: solid in the traced band, dashed beyond it.

    Parameters
    ----------
    row : WhistlerRow
        One row; without L there is no curve.
    ax : matplotlib.axes.Axes
        Where to draw.
    model : fieldlines.FieldLineModel
        The default model of the fit.
    style : PathStyle
        Its look.
    band_hz : tuple of float
        Lowest and highest frequency drawn; above, half the equatorial gyrofrequency is the limit
        if it is lower, because no duct guides beyond it.

    Returns
    -------
    list of Line2D
        The solid line first, then what is dashed.
    """
    if not has_model(row):
        return []
    inner = (row.frequency_low_hz, row.frequency_high_hz)
    top_hz = min(band_hz[1], VALID_SHARE * row.equatorial_gyrofrequency_hz)
    lines = []
    for low_hz, high_hz in (inner, (band_hz[0], inner[0]), (inner[1], top_hz)):
        if low_hz >= high_hz:
            continue
        frequency_hz = np.linspace(low_hz, high_hz, CURVE_POINTS)
        (line,) = ax.plot(
            curve_times(row, frequency_hz, model=model),
            frequency_hz / 1e3,
            color=style.colour,
            linewidth=CURVE_PT,  # thin and without a rim: the whistler must show on both sides
            zorder=3,
        )
        if (low_hz, high_hz) != inner:
            line.set_dashes(style.dashes)
        lines.append(line)
    return lines


def has_model(row: WhistlerRow) -> bool:
    """Whether a row's L and density are known, so that its curve can be drawn."""
    return math.isfinite(row.l_value) and math.isfinite(row.equatorial_gyrofrequency_hz)


def curve_times(row: WhistlerRow, frequency_hz: FloatArray, *, model: FieldLineModel) -> FloatArray:
    """Return when the fitted curve of a row passes frequencies, s from the first frame."""
    return model_curve(
        frequency_hz,
        l_value=row.l_value,
        density_m3=row.equatorial_density_cm3 * 1e6,
        hops=row.hops,
        lightning_time_s=row.lightning_time_s,
        model=row_model(row, default=model),
    )


def draw_nose(row: WhistlerRow, ax: Axes, *, style: PathStyle) -> Line2D | None:
    """Return the mark of a row's nose, or None when it lies outside the axes' limits."""
    time_s = row.lightning_time_s + row.hops * row.nose_time_s
    frequency_khz = row.nose_frequency_hz / 1e3
    x_low, x_high = sorted(ax.get_xlim())
    y_low, y_high = sorted(ax.get_ylim())
    if not (x_low <= time_s <= x_high and y_low <= frequency_khz <= y_high):
        return None  # so also for NaN
    (mark,) = ax.plot(
        time_s,
        frequency_khz,
        marker="*",
        markersize=11.0,
        color=style.colour,
        markeredgecolor="white",
        markeredgewidth=0.8,
        linestyle="none",
        zorder=5,
    )
    return mark


def draw_sferic(row: WhistlerRow, ax: Axes) -> list[Line2D]:
    """Return mark, guide line and error bar of the causative sferic, at the upper edge.

    The mark is filled when an actual sferic was identified and hollow when it is only predicted;
    only the prediction has an error bar wide enough to draw.
    """
    if not math.isfinite(row.sferic_time_s):
        return []
    upper = ax.get_xaxis_transform()
    (mark,) = ax.plot(
        row.sferic_time_s,
        0.96,
        marker="v",
        markersize=7.0,
        color="black",
        markerfacecolor="black" if row.sferic_seen else "white",
        linestyle="none",
        transform=upper,
        zorder=6,
    )
    guide = ax.axvline(row.sferic_time_s, color="black", linewidth=0.8, linestyle=":", zorder=2)
    artists = [mark, guide]
    if not row.sferic_seen and math.isfinite(row.sferic_time_sd_s):
        ends = row.sferic_time_s + row.sferic_time_sd_s * np.array([-1.0, 1.0])
        artists += ax.plot(
            ends, [0.96, 0.96], "|-", color="black", linewidth=1.0, transform=upper, zorder=5
        )
    return artists


def draw_residuals(
    row: WhistlerRow, ax: Axes, *, model: FieldLineModel, style: PathStyle
) -> ErrorbarContainer | None:
    """Return trace minus model with one-sigma bars, frequency upward; None without a model."""
    if not has_model(row) or not len(row.trace.time_s):
        return None
    fitted_s = curve_times(row, row.trace.frequency_hz, model=model)
    return ax.errorbar(
        1e3 * (row.trace.time_s - fitted_s),
        row.trace.frequency_hz / 1e3,
        xerr=1e3 * row.trace.time_sd_s,
        fmt=style.marker,
        color=style.colour,
        markersize=4.0,
        elinewidth=0.9,
        label=row_label(row),
    )


def draw_residual_panel(
    rows: Sequence[WhistlerRow], ax: Axes, *, model: FieldLineModel
) -> list[ErrorbarContainer]:
    """Return the residuals of a stroke's rows about a zero line, on limits alike both ways."""
    ax.axvline(0.0, color="0.4", linewidth=0.8)
    drawn = [
        draw_residuals(row, ax, model=model, style=path_style(number))
        for number, row in enumerate(rows)
    ]
    bars = [item for item in drawn if item is not None]
    reach_ms = LEAST_RESIDUAL_MS
    for row in rows:
        if has_model(row) and len(row.trace.time_s):
            left_s = row.trace.time_s - curve_times(row, row.trace.frequency_hz, model=model)
            reach_ms = max(reach_ms, 1e3 * float(np.max(np.abs(left_s) + row.trace.time_sd_s)))
    ax.set_xlim(-1.1 * reach_ms, 1.1 * reach_ms)
    ax.xaxis.set_major_locator(MaxNLocator(nbins=4, symmetric=True))
    label_axes(ax, RESIDUAL_LABEL, FREQUENCY_LABEL)
    return bars


def draw_time_line(
    rows: Sequence[WhistlerRow], ax: Axes, *, quantity: str = "l_value", time_unit_s: float = 60.0
) -> list[ErrorbarContainer]:
    """Return a quantity of rows against time of stroke, one colour and marker for each hop order.

    Parameters
    ----------
    rows : sequence of WhistlerRow
        Rows where the quantity is undetermined are left out.
    ax : matplotlib.axes.Axes
        Where to draw.
    quantity : str
        ``l_value`` or ``equatorial_density_cm3``.
    time_unit_s : float
        Seconds in one unit of the time axis.

    Returns
    -------
    list of ErrorbarContainer
        For each hop order a thin bar of the total one-sigma and a thick one of that given the
        model.
    """
    parts = {"l_value": "l_value_{}", "equatorial_density_cm3": "equatorial_density_{}_cm3"}
    column = parts[quantity]
    bars = []
    for hops in sorted({row.hops for row in rows}):
        chosen = [row for row in rows if row.hops == hops and math.isfinite(getattr(row, quantity))]
        if not chosen:
            continue
        time = [row.sferic_time_s / time_unit_s for row in chosen]
        value = [getattr(row, quantity) for row in chosen]
        given = np.nan_to_num([getattr(row, column.format("sd")) for row in chosen])
        open_sd = np.nan_to_num([getattr(row, column.format("profile_sd")) for row in chosen])
        style = path_style(hops - 1)
        total = ax.errorbar(
            time, value, yerr=np.hypot(given, open_sd), fmt="none", ecolor=style.colour
        )
        inner = ax.errorbar(
            time,
            value,
            yerr=given,
            fmt=style.marker,
            color=style.colour,
            markersize=4.5,
            elinewidth=2.6,
            label=f"{hops} hop{'s' if hops > 1 else ''}",
        )
        bars += [total, inner]
    return bars
