"""Find falling traces: power along the bank's curves, a threshold from reversed time, peeling."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from whistler.bank import REFERENCE_HZ, Bank
from whistler.chance import Null, chance_law
from whistler.curvesum import slope_sums, soften, template_maxima
from whistler.rowplan import plan_rows, range_scale, row_noise
from whistler.spectrogram import Spectrogram

CLIP = 5.0  # times the mean noise power; costs 0.03 dB in noise and takes the rest of the sferics
RANGE_STARTS_HZ = (0.0, 1200.0)
RANGE_ENDS_HZ = (3600.0, 6200.0)
LARGEST_SHARE = 0.5  # of the power that one sub-band may hold
SUM_REACH_S = 1.2  # around a peeled ridge: curves that pass farther off share little with it
ROW_REACH_S = 0.5
UNKNOWN_SIGMA = 1e30  # before the noise is known, nothing stands out
NULL_STRIDE = 3  # every third template serves for the reversed recording


@dataclass(frozen=True)
class Candidate:
    """A falling trace found in the spectrogram.

    Parameters
    ----------
    time_s : float
        When the curve passes the reference frequency, from the recording's first frame.
    l_value, density_m3 : float
        Curve: field line and one-hop-equivalent density.
    band_hz : tuple of float
        Band over which the power was summed.
    strength : float
        Sum in sigmas of the noise.
    false_alarms_per_hour : float
        Expected number of such or stronger sums in an hour of this recording without whistlers.
    frequency_hz, curve_s : ndarray, shape (n,)
        The curve itself, times from the recording's first frame.
    thickness_s : float
        Time scale of the pass that found it.
    """

    time_s: float
    l_value: float
    density_m3: float
    band_hz: tuple[float, float]
    strength: float
    false_alarms_per_hour: float
    frequency_hz: NDArray[np.float64]
    curve_s: NDArray[np.float64]
    thickness_s: float


class CurveSearch:
    """The bank laid over one spectrogram, ready to be searched and peeled.

    Parameters
    ----------
    spectrogram : Spectrogram
        Normalised power.
    bank : whistler.bank.Bank
        Curves at the spectrogram's channels.
    smooth : int
        Frames averaged before the sums: 1 for thin traces, more for diffuse ones.
    """

    def __init__(self, spectrogram: Spectrogram, bank: Bank, *, smooth: int = 1) -> None:
        self.spectrogram = spectrogram
        self.bank = bank
        self._step = max(1, smooth // 2)
        self._excess, self._heard = self._prepare(
            np.minimum(spectrogram.power, np.float32(CLIP)), smooth
        )
        self._pair_s = 2 * self._step * spectrogram.hop_s
        self._plan = plan_rows(bank, frame_s=self._pair_s / 2)
        frames = self._excess.shape[2]
        self._rows = np.zeros((len(self._plan.first_channel), frames), np.float32)
        self._best = np.full(frames, -1e9, np.float32)
        self._which = np.zeros(frames, np.int32)
        self._level = np.zeros((len(self._rows), 1), np.float32)
        self._sigma = np.full(len(self._rows), UNKNOWN_SIGMA, np.float32)
        self._stale_rows: list[tuple[int, int]] = []
        self._stale_sums: list[tuple[int, int]] = []
        self._sum(0, frames)
        self._level, variance = row_noise(self._rows[:, self._heard])
        self._sigma = np.sqrt(variance).astype(np.float32)
        self._rows -= self._level
        soften(self._rows, self._sigma, 0, frames)
        self._scale = range_scale(variance, self._plan, starts=self._starts, ends=self._ends)
        self._maximise(0, frames)

    def _prepare(
        self, power: NDArray[np.float32], smooth: int
    ) -> tuple[NDArray[np.float32], NDArray[np.bool_]]:
        """Excess over the channel mean, averaged and thinned, split into even and odd frames.

        Frames without any power, from silence or samples that are not numbers, say nothing about
        the noise: they hold no excess, and the second array is False at pairs of them.
        """
        if smooth > 1:
            total = np.pad(np.cumsum(power, axis=1, dtype=np.float64), ((0, 0), (1, 0)))
            mean = (total[:, smooth:] - total[:, :-smooth]) / smooth
            power = mean[:, :: self._step].astype(np.float32)
        even = power.shape[1] // 2 * 2
        power = power[:, :even]
        heard = power.max(axis=0) > 0.0
        if not heard.any():
            heard[:] = True
        power = np.where(heard, power - power[:, heard].mean(axis=1, keepdims=True), 0.0)
        halves = np.stack([power[:, 0::2], power[:, 1::2]]).astype(np.float32)
        return np.ascontiguousarray(halves), heard[0::2] | heard[1::2]

    @property
    def _origin_s(self) -> float:
        lead = 0.5 * (2 * self._step - 1) if self._step > 1 else 0.0
        return self.spectrogram.start_s + lead * self.spectrogram.hop_s

    @property
    def _starts(self) -> NDArray[np.int64]:
        edges = self._plan.edges_hz
        return np.unique([int(np.searchsorted(edges, hz)) for hz in RANGE_STARTS_HZ])

    @property
    def _ends(self) -> NDArray[np.int64]:
        edges = self._plan.edges_hz
        ends = np.zeros(len(edges), np.int64)
        for hz in RANGE_ENDS_HZ:
            ends[min(int(np.searchsorted(edges, hz)), len(edges) - 1)] = 1
        return ends

    def _sum(self, start: int, stop: int) -> None:
        plan = self._plan
        slope_sums(
            self._excess,
            plan.first_channel,
            plan.channel_count,
            plan.shift,
            self._rows,
            start,
            stop,
        )
        self._rows[:, start:stop] -= self._level
        soften(self._rows, self._sigma, start, stop)

    def _maximise(self, start: int, stop: int) -> None:
        plan = self._plan
        template_maxima(
            self._rows,
            plan.row_index,
            plan.offset,
            plan.band_count,
            self._scale,
            self._starts,
            self._ends,
            self._best,
            self._which,
            start,
            stop,
        )

    def null(self) -> Null:
        """Return the law of chance sums: the same bank over reversed time."""
        plan = self._plan
        frames = len(self._best)
        rows = np.zeros_like(self._rows)
        mirrored = np.ascontiguousarray(self._excess[::-1, :, ::-1])
        slope_sums(mirrored, plan.first_channel, plan.channel_count, plan.shift, rows, 0, frames)
        rows -= self._level
        soften(rows, self._sigma, 0, frames)
        best = np.full(frames, -1e9, np.float32)
        template_maxima(
            rows,
            plan.row_index[::NULL_STRIDE],
            plan.offset[::NULL_STRIDE],
            plan.band_count[::NULL_STRIDE],
            self._scale[::NULL_STRIDE],
            self._starts,
            self._ends,
            best,
            np.zeros(frames, np.int32),
            0,
            frames,
        )
        law = chance_law(best[self._heard[::-1]], frame_s=self._pair_s)
        # A whole bank has more chances than every third curve of it; as if they were independent.
        return replace(law, location=law.location + law.scale * float(np.log(NULL_STRIDE)))

    def peaks(self, threshold: float, *, apart_s: float) -> list[int]:
        """Return frame pairs of the sums above `threshold`, strongest first, `apart_s` apart."""
        order = np.flatnonzero(self._best >= threshold)
        order = order[np.argsort(-self._best[order], kind="stable")]
        apart = max(1, round(apart_s / self._pair_s))
        kept: list[int] = []
        for at in order:
            if all(abs(int(at) - other) >= apart for other in kept):
                kept.append(int(at))
        return kept

    def candidate(self, at: int, *, threshold: float) -> Candidate | None:
        """Return the trace whose sum peaks at frame pair `at`.

        Parameters
        ----------
        at : int
            From :meth:`peaks`.
        threshold : float
            Least sum; those far from a peeled ridge are not made again until asked for here.

        Returns
        -------
        Candidate or None
            None when peeling has taken the power away, or one sub-band holds nearly all of it.
        """
        code = int(self._which[at])
        template, start = divmod(code, len(self._starts))
        first = int(self._starts[start])
        last, strength, share = self._best_end(template, first, at)
        if strength < threshold or share > LARGEST_SHARE:
            self._best[at] = min(strength, threshold - 1.0)
            return None
        edges = self._plan.edges_hz
        return self._describe(
            template,
            at * self._pair_s + self._origin_s,
            (edges[first], edges[last]),
            strength,
        )

    def _best_end(self, template: int, first: int, at: int) -> tuple[int, float, float]:
        plan = self._plan
        count = int(plan.band_count[template])
        at_rows = at + plan.offset[template, :count]
        inside = (at_rows >= 0) & (at_rows < self._rows.shape[1])
        value = np.where(
            inside,
            self._rows[plan.row_index[template, :count], np.clip(at_rows, 0, len(self._best) - 1)],
            0.0,
        )
        ends = [b for b in range(first + 1, count + 1) if self._ends[b] or b == count]
        start = int(np.flatnonzero(self._starts == first)[0])
        scores = [value[first:b].sum() * self._scale[template, start, b] for b in ends]
        best = int(np.argmax(scores))
        used = value[first : ends[best]]
        share = float(used.max() / max(used.sum(), 1e-6))
        return ends[best], float(scores[best]), share

    def _describe(
        self,
        template: int,
        time_s: float,
        band_hz: tuple[float, float],
        strength: float,
    ) -> Candidate:
        bank = self.bank
        inside = np.isfinite(bank.delay_s[template])
        return Candidate(
            time_s=time_s,
            l_value=float(bank.l_value[template]),
            density_m3=float(bank.density_m3[template]),
            band_hz=(float(band_hz[0]), float(min(band_hz[1], bank.top_hz[template]))),
            strength=strength,
            false_alarms_per_hour=np.nan,
            frequency_hz=bank.frequency_hz[inside],
            curve_s=time_s + bank.delay_s[template, inside],
            thickness_s=self._pair_s,
        )

    def peel(
        self,
        frequency_hz: NDArray[np.float64],
        ridges: list[tuple[NDArray[np.float64], NDArray[np.float64]]],
        *,
        time_s: float,
    ) -> None:
        """Set the cells of ridges to the noise mean; :meth:`refresh` makes the sums again.

        Parameters
        ----------
        frequency_hz : ndarray, shape (n,)
            Channels of the ridges.
        ridges : list of (curve_s, half_width_s)
            Middle and half width in time, each of shape (n,).
        time_s : float
            When they pass the reference frequency.
        """
        channel = np.searchsorted(self.spectrogram.frequency_hz, frequency_hz)
        channel = np.minimum(channel, self._excess.shape[1] - 1)
        last = 2 * self._excess.shape[2] - 1
        frames = [int(self._frame(np.array([time_s]), last)[0])]
        for curve_s, half_width_s in ridges:
            low = self._frame(curve_s - half_width_s, last)
            high = self._frame(curve_s + half_width_s, last)
            for c, a, b in zip(channel, low, high, strict=True):
                for phase in (0, 1):
                    self._excess[phase, c, (a + 1 - phase) // 2 : (b - phase) // 2 + 1] = 0.0
            frames += [int(low.min()), int(high.max())]
        row_reach, reach = (round(span / self._pair_s) for span in (ROW_REACH_S, SUM_REACH_S))
        size = len(self._best)
        self._stale_rows.append(
            (max(0, min(frames) // 2 - row_reach), min(size, max(frames) // 2 + row_reach))
        )
        self._stale_sums.append((max(0, frames[0] // 2 - reach), min(size, frames[0] // 2 + reach)))

    def refresh(self) -> None:
        """Make the sums again wherever ridges have been peeled off since the last time."""
        for start, stop in _merged(self._stale_rows):
            self._sum(start, stop)
        for start, stop in _merged(self._stale_sums):
            self._maximise(start, stop)
        self._stale_rows.clear()
        self._stale_sums.clear()

    def _frame(self, time_s: NDArray[np.float64], last: int) -> NDArray[np.int64]:
        frame = np.rint((time_s - self._origin_s) / (0.5 * self._pair_s)).astype(np.int64)
        return np.clip(frame, 0, last)


def _merged(spans: list[tuple[int, int]]) -> list[tuple[int, int]]:
    """Join overlapping spans."""
    joined: list[tuple[int, int]] = []
    for start, stop in sorted(spans):
        if joined and start <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(stop, joined[-1][1]))
        else:
            joined.append((start, stop))
    return joined


def reference_delay_s(frequency_hz: NDArray[np.float64], curve_s: NDArray[np.float64]) -> float:
    """Time at which a curve passes the reference frequency."""
    return float(np.interp(REFERENCE_HZ, frequency_hz, curve_s))
