"""Power summed along curves: the two compiled loops the search spends its time in.

Level one sums the channels of a sub-band along straight lines of every slope that occurs; level
two adds one such row per sub-band for each template. The rows live on every second frame; their
channels are taken at single-frame precision.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numba import njit, prange
from numpy.typing import NDArray

KNEE = 3.0  # sigmas of a row; above, the remains of sferics are more likely than a whistler's share
CHUNK = 512  # frames a thread works on at a time: the sums stay in the nearest cache


def _jit(*, parallel: bool = False) -> Callable[[Callable[..., None]], Any]:
    """Compile, and keep the result on disk where there is a place for it."""

    def compiled(function: Callable[..., None]) -> Any:
        try:
            return njit(cache=True, fastmath=True, parallel=parallel)(function)
        except RuntimeError:  # a read-only installation and no home folder
            return njit(fastmath=True, parallel=parallel)(function)

    return compiled


@_jit(parallel=True)
def slope_sums(
    even_odd: NDArray[np.float32],
    first_channel: NDArray[np.int64],
    channel_count: NDArray[np.int64],
    shift: NDArray[np.int64],
    rows: NDArray[np.float32],
    start: int,
    stop: int,
) -> None:
    """Fill `rows[:, start:stop]` with the channel sums along each row's slope.

    Parameters
    ----------
    even_odd : ndarray, shape (2, channels, frames), float32
        Excess power at even and odd frames.
    first_channel, channel_count : ndarray, shape (r,)
        Channels of each row.
    shift : ndarray, shape (r, most channels)
        Frame shift of each channel of each row, in single frames.
    rows : ndarray, shape (r, frames), float32
        Result, written in place.
    start, stop : int
        Range of frame pairs to fill.
    """
    frames = even_odd.shape[2]
    for r in prange(rows.shape[0]):
        row = rows[r]
        row[start:stop] = 0.0
        for c in range(channel_count[r]):
            s = shift[r, c]
            source = even_odd[s & 1, first_channel[r] + c]
            whole = s >> 1
            low = max(start, -whole)
            high = min(stop, frames - whole)
            for t in range(low, high):
                row[t] += source[t + whole]


@_jit(parallel=True)
def soften(rows: NDArray[np.float32], sigma: NDArray[np.float32], start: int, stop: int) -> None:
    """Let what stands above `KNEE` sigmas count by its root, in place.

    A sub-band cannot speak for a whole curve: the remains of a sferic fill one, a whistler many.

    Parameters
    ----------
    rows : ndarray, shape (r, frames), float32
        Channel sums less their level.
    sigma : ndarray, shape (r,), float32
        Of each row's noise.
    start, stop : int
        Range of frame pairs.
    """
    for r in prange(rows.shape[0]):
        row = rows[r]
        scale = sigma[r]
        knee = np.float32(KNEE * scale)
        for t in range(start, stop):
            over = row[t] - knee
            if over > 0.0:
                row[t] = knee + 2.0 * scale * (np.sqrt(1.0 + over / scale) - 1.0)


@_jit()
def _keep_larger(
    total: NDArray[np.float32],
    before: NDArray[np.float32],
    factor: np.float32,
    mark: int,
    top: NDArray[np.float32],
    code: NDArray[np.int32],
) -> None:
    """Replace what is smaller; written with selects so that it compiles to vector code."""
    for t in range(CHUNK):
        z = (total[t] - before[t]) * factor
        larger = z > top[t]
        top[t] = z if larger else top[t]
        code[t] = np.int32(mark) if larger else code[t]


@_jit(parallel=True)
def template_maxima(
    rows: NDArray[np.float32],
    row_index: NDArray[np.int64],
    offset: NDArray[np.int64],
    band_count: NDArray[np.int64],
    scale: NDArray[np.float32],
    starts: NDArray[np.int64],
    ends: NDArray[np.int64],
    best: NDArray[np.float32],
    which: NDArray[np.int32],
    start: int,
    stop: int,
) -> None:
    """Fill the largest normalised template sum, and its template, at each frame pair.

    Parameters
    ----------
    rows : ndarray, shape (r, frames), float32
        Output of :func:`slope_sums`.
    row_index, offset : ndarray, shape (t, b)
        Row and frame-pair offset of each sub-band of each template.
    band_count : ndarray, shape (t,)
        Sub-bands that a template reaches.
    scale : ndarray, shape (t, s, b + 1), float32
        One over the noise sigma of the sum from start `s` to end `b`; 0 where not searched.
    starts : ndarray, shape (s,)
        First sub-band of each searched range.
    ends : ndarray, shape (b + 1,)
        1 where a range may end before this sub-band.
    best, which : ndarray, shape (frames,)
        Result, written in place: sigma, and template * s + start.
    start, stop : int
        Range of frame pairs to fill.
    """
    frames = rows.shape[1]
    start_count = len(starts)
    for chunk in prange((stop - start + CHUNK - 1) // CHUNK):
        first = start + chunk * CHUNK
        last = min(first + CHUNK, stop)
        total = np.zeros(CHUNK, np.float32)
        before = np.zeros((start_count, CHUNK), np.float32)
        top = np.full(CHUNK, -1e9, np.float32)
        code = np.zeros(CHUNK, np.int32)
        for k in range(row_index.shape[0]):
            total[:] = 0.0
            for b in range(band_count[k]):
                for s in range(start_count):
                    if starts[s] == b:
                        before[s, :] = total
                source = rows[row_index[k, b]]
                shift = offset[k, b]
                low = max(first, -shift)
                high = min(last, frames - shift)
                for t in range(low, high):
                    total[t - first] += source[t + shift]
                if ends[b + 1] == 0 and b + 1 < band_count[k]:
                    continue
                for s in range(start_count):
                    factor = scale[k, s, b + 1]
                    if factor > 0.0:
                        _keep_larger(total, before[s], factor, k * start_count + s, top, code)
        best[first:last] = top[: last - first]
        which[first:last] = code[: last - first]
