"""Fit a stroke whose points a person chose: a measured one's problem, begun from a grid."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np

from fieldlines import saturated_density, travel_time
from whistler.clock import decimal_year, iso_time
from whistler.errors import Notice, UsageError
from whistler.fit import fit_stroke
from whistler.group import Stroke
from whistler.model import field_line_model, receiver_latitude
from whistler.problem import PathTrace, SfericTime, Ties
from whistler.results import Sighting, stroke_rows
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.trace import Trace

LIGHTNING_SD_S = (
    1e-4  # of a lightning time given by the user: a location network's (common practice)
)
LEAST_POINTS = 3


@dataclass(frozen=True)
class HandStroke:
    """A stroke to be fitted, with what is known of it beside its points.

    Parameters
    ----------
    items : tuple of PathTrace
        Its traces.
    sferic_s : tuple of float, optional
        Causative sferic at the receiver and its one-sigma.
    lightning_time_s : float, optional
        Time of the lightning itself.
    l_value : float, optional
        L to hold the paths at.
    settings : Settings
        Model and declared one-sigmas.
    zero : datetime, optional
        From where times count, UTC.
    recording : str
        Name of the source.
    sightings : tuple of Sighting
        What else is known of each trace.
    sferic_probability, hop_probability : float
        Of the sferic and of the numbers of hops.
    group : int
        Number of the stroke.
    """

    items: tuple[PathTrace, ...]
    sferic_s: tuple[float, float] | None
    lightning_time_s: float | None
    l_value: float | None
    settings: Settings
    zero: datetime | None
    recording: str
    sightings: tuple[Sighting, ...]
    sferic_probability: float
    group: int = 1
    hop_probability: float = 1.0

    @property
    def year(self) -> float:
        """Date of the Earth's field."""
        return decimal_year(self.zero)

    @property
    def latitude_rad(self) -> float | None:
        """Geomagnetic latitude of the receiver."""
        return receiver_latitude(self.settings, decimal_year=self.year)

    @property
    def ties(self) -> Ties:
        """What enters the fit beside the points."""
        sferic = None
        if self.sferic_s is not None:
            odd = self.items[0].hops % 2 == 1
            sferic = SfericTime(*self.sferic_s, odd, self.latitude_rad)
        given_s = self.lightning_time_s
        tie = None if given_s is None else (given_s, LIGHTNING_SD_S)
        return Ties(sferic, tie, self.l_value)


Start = tuple[float, float, float]  # L, density in m^-3, lightning time in s


def fit_by_hand(task: HandStroke, known: Mapping[int, Start]) -> list[WhistlerRow]:
    """Return one row for each trace of a stroke.

    Parameters
    ----------
    task : HandStroke
        The stroke.
    known : mapping of int to tuple
        L, density in m^-3 and lightning time to start from, for paths where they are known; the
        others start from the best of a grid.
    """
    model, ties = field_line_model(task.settings, decimal_year=task.year), task.ties
    first = {item.path: item for item in reversed(task.items)}
    starts = [
        known[path] if path in known else _start(first[path], ties, task.settings, task.year)
        for path in sorted(first)
    ]
    fit = fit_stroke(
        task.items,
        start=[(l_value, density) for l_value, density, _ in starts],
        lightning_time_s=float(np.median([time_s for _, _, time_s in starts])),
        model=model,
        ties=ties,
    )
    stroke = Stroke(
        members=tuple(range(len(task.items))),
        hops=tuple(item.hops for item in task.items),
        traces=task.items,
        fit=fit,
        sferic=ties.sferic,
        sferic_probability=task.sferic_probability,
        hop_probability=task.hop_probability,
    )
    rows = stroke_rows(
        stroke,
        task.sightings,
        group=task.group,
        recording=task.recording,
        model=model,
        ties=ties,
        settings=task.settings,
        receiver_latitude_rad=task.latitude_rad,
    )
    return [replace(row, time=_clock(task.zero, row.sferic_time_s)) for row in rows]


def hop_orders(hops: int | Sequence[int], count: int) -> tuple[int, ...]:
    """Return the field-line crossings of each trace.

    Parameters
    ----------
    hops : int or sequence of int
        One number for all, or one for each.
    count : int
        How many traces.

    Raises
    ------
    UsageError
        When there are as many numbers as neither one nor traces, or odd and even ones.
    """
    orders = (hops,) * count if isinstance(hops, int) else tuple(hops)
    if len(orders) == 1:
        orders *= count
    if len(orders) != count:
        reason, step = f"{len(orders)} numbers for {count} traces", "give one, or one for each"
        raise UsageError(Notice("E601", "hops", reason, step))
    if len({order % 2 for order in orders}) > 1:
        reason = "odd and even numbers: their strokes lie in opposite hemispheres"
        raise UsageError(Notice("E601", "hops", reason, "fit them one by one"))
    return orders


def _clock(start_time: datetime | None, time_s: float) -> str | None:
    if start_time is None or not np.isfinite(time_s):
        return None
    return iso_time(start_time + timedelta(seconds=time_s))


def check_points(traces: Mapping[str, Trace]) -> None:
    """Refuse traces of too few points.

    Raises
    ------
    UsageError
        Naming the first such trace.
    """
    for name, trace in traces.items():
        if len(np.unique(trace.frequency_hz)) < LEAST_POINTS:
            reason = f"trace {name!r} has {len(trace.time_s)} points"
            step = f"pick at least {LEAST_POINTS} different frequencies"
            raise UsageError(Notice("E604", name, reason, step))


def _start(item: PathTrace, ties: Ties, settings: Settings, year: float) -> Start:
    """Best of a coarse grid over L and density, the time fitted or given: L, density, time."""
    model = field_line_model(settings, decimal_year=year)
    trace = item.trace
    top_l = float(model.dipole.l_from_equatorial_gyrofrequency(1.1 * trace.frequency_hz.max()))
    wanted = ties.l_value
    l_grid = [wanted] if wanted is not None else np.linspace(1.4, min(6.5, max(top_l, 1.5)), 40)
    weight = 1.0 / trace.time_sd_s**2
    best, least = (2.5, 1e9, 0.0), np.inf
    for l_value in l_grid:
        density = float(saturated_density(l_value)) * np.geomspace(0.03, 10.0, 60)
        delay = item.hops * travel_time(
            trace.frequency_hz, l_value=float(l_value), equatorial_density_m3=density, model=model
        )
        left = trace.time_s - delay
        time_s = (left * weight).sum(axis=1) / weight.sum()
        if ties.lightning_time_s is not None:
            time_s = np.full(len(density), ties.lightning_time_s[0])
        misfit = ((left - time_s[:, None]) ** 2 * weight).sum(axis=1)
        k = int(np.argmin(misfit))
        if misfit[k] < least:
            best, least = (float(l_value), float(density[k]), float(time_s[k])), float(misfit[k])
    return best
