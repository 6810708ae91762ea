"""How the bank's curves share straight pieces, and how noisy sums of those pieces are."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from whistler.bank import Bank

BAND_RATIO = 1.2  # width of a sub-band: a curve stays straight in it to a fraction of its own cell


@dataclass(frozen=True)
class RowPlan:
    """How templates share sub-band rows."""

    edges_hz: NDArray[np.float64]
    first_channel: NDArray[np.int64]
    channel_count: NDArray[np.int64]
    shift: NDArray[np.int64]
    row_index: NDArray[np.int64]
    offset: NDArray[np.int64]
    band_count: NDArray[np.int64]


def plan_rows(bank: Bank, *, frame_s: float) -> RowPlan:
    """Return every template as straight pieces that templates share.

    Parameters
    ----------
    bank : Bank
        Templates at the spectrogram's channels.
    frame_s : float
        Step between the frames whose shifts are counted.

    Returns
    -------
    RowPlan
        Pieces, and which of them each template is made of.
    """
    frequency_hz = bank.frequency_hz
    edges = _sub_band_edges(frequency_hz)
    edges_hz = np.append(frequency_hz[edges[:-1]], frequency_hz[-1])
    bands = len(edges) - 1
    row_index = np.zeros((len(bank), bands), np.int64)
    offset = np.zeros((len(bank), bands), np.int64)
    band_count = np.zeros(len(bank), np.int64)
    first: list[int] = []
    count: list[int] = []
    shifts: list[NDArray[np.int64]] = []
    widest = int(np.diff(edges).max())
    for b in range(bands):
        a, z = edges[b], edges[b + 1]
        spread = (bank.delay_s[:, z - 1] - bank.delay_s[:, a]) / (2.0 * frame_s)
        reached = np.isfinite(spread)
        band_count[reached] = b + 1
        kind, inverse = np.unique(np.rint(spread[reached]).astype(int), return_inverse=True)
        row_index[reached, b] = inverse + len(first)
        middle = bank.delay_s[reached, a:z].mean(axis=1)
        offset[reached, b] = np.rint(middle / (2.0 * frame_s)).astype(int)
        place = np.linspace(-0.5, 0.5, z - a) if z - a > 1 else np.zeros(1)
        for value in kind:
            shift = np.zeros(widest, np.int64)
            shift[: z - a] = np.rint(2.0 * value * place).astype(int)
            first.append(a)
            count.append(z - a)
            shifts.append(shift)
    return RowPlan(
        edges_hz,
        np.array(first),
        np.array(count),
        np.array(shifts),
        row_index,
        offset,
        band_count,
    )


def _sub_band_edges(frequency_hz: NDArray[np.float64]) -> NDArray[np.int64]:
    edges = [0]
    while edges[-1] < len(frequency_hz):
        top_hz = frequency_hz[edges[-1]] * BAND_RATIO
        following = int(np.searchsorted(frequency_hz, top_hz))
        edges.append(min(max(following, edges[-1] + 2), len(frequency_hz)))
    return np.array(edges)


def row_noise(rows: NDArray[np.float32]) -> tuple[NDArray[np.float32], NDArray[np.float64]]:
    """Return level and variance of each row's noise.

    Parameters
    ----------
    rows : ndarray, shape (r, frames), float32
        Sums along the pieces.

    Returns
    -------
    ndarray, shape (r, 1), float32, and ndarray, shape (r,)
        From the lower half of the values: whistlers fill the upper one.
    """
    sample = rows[:, :: max(1, rows.shape[1] // 500)]
    low, middle = np.percentile(sample, [15.87, 50.0], axis=1)
    variance = np.maximum(middle - low, 1e-3) ** 2
    return middle[:, None].astype(np.float32), np.asarray(variance, np.float64)


def range_scale(
    variance: NDArray[np.float64],
    plan: RowPlan,
    *,
    starts: NDArray[np.int64],
    ends: NDArray[np.int64],
) -> NDArray[np.float32]:
    """Return one over the noise sigma of each searched range of each template.

    Parameters
    ----------
    variance : ndarray, shape (r,)
        Of each row.
    plan : RowPlan
        Rows of each template.
    starts, ends : ndarray
        Sub-bands at which a range may start, and flags of those before which one may end.

    Returns
    -------
    ndarray, shape (t, s, b + 1), float32
        0 where a range is not searched.
    """
    templates, bands = plan.row_index.shape
    scale = np.zeros((templates, len(starts), bands + 1), np.float32)
    by_band = np.where(np.arange(bands) < plan.band_count[:, None], variance[plan.row_index], 0.0)
    total = np.pad(np.cumsum(by_band, axis=1), ((0, 0), (1, 0)))
    for s, first in enumerate(starts):
        for b in range(first + 3, bands + 1):
            searched = (plan.band_count == b) | ((ends[b] == 1) & (plan.band_count >= b))
            spread = total[:, b] - total[:, first]
            scale[searched, s, b] = 1.0 / np.sqrt(spread[searched])
    return scale
