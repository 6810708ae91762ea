"""Fit hand-picked points: the same problem as a measured stroke, with what the user knows."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime, timedelta

import numpy as np

from fieldlines import saturated_density, travel_time
from whistler.clock import decimal_year, iso_time
from whistler.errors import Notice, UsageError
from whistler.fit import fit_stroke
from whistler.group import Stroke
from whistler.model import field_line_model, receiver_latitude
from whistler.problem import L_LIMITS, PathTrace, SfericTime, Ties
from whistler.results import Sighting, stroke_rows
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.trace import Trace

LIGHTNING_SD_S = (
    1e-4  # of a lightning time given by the user: a location network's (common practice)
)
LEAST_POINTS = 3


def fit_picks(
    traces: dict[str, Trace],
    *,
    settings: Settings,
    recording: str = "picks",
    hops: int = 1,
    start_time: datetime | None = None,
    sferic_time_s: float | None = None,
    sferic_time_sd_s: float = 0.002,
    lightning_time_s: float | None = None,
    l_value: float | None = None,
) -> list[WhistlerRow]:
    """Return L and density of hand-picked traces, taken as paths of one stroke.

    Parameters
    ----------
    traces : dict of str to Trace
        Points by name, times from one common zero.
    settings : Settings
        Model and declared one-sigmas.
    recording : str
        What to call the source.
    hops : int
        Field-line crossings of every trace.
    start_time : datetime, optional
        Time zero of the picks, UTC.
    sferic_time_s, sferic_time_sd_s : float
        Causative sferic and its one-sigma; without it the time is free.
    lightning_time_s : float, optional
        Time of the lightning itself, when it is known from elsewhere.
    l_value : float, optional
        L to hold the paths at.

    Returns
    -------
    list of WhistlerRow
        One for each trace.

    Raises
    ------
    UsageError
        When a trace has fewer than three points.
    """
    _check(traces)
    if not sferic_time_sd_s > 0.0:
        reason = f"{sferic_time_sd_s} s is not above 0"
        raise UsageError(Notice("E601", "sferic_time_sd_s", reason, "give its one-sigma in s"))
    model = field_line_model(settings, decimal_year=decimal_year(start_time))
    settings = replace(settings, l_range=L_LIMITS)  # picks need not lie where the search looks
    latitude_rad = receiver_latitude(settings, decimal_year=decimal_year(start_time))
    sferic = None
    if sferic_time_s is not None:
        sferic = SfericTime(sferic_time_s, sferic_time_sd_s, hops % 2 == 1, latitude_rad)
    tie = None if lightning_time_s is None else (lightning_time_s, LIGHTNING_SD_S)
    ties = Ties(sferic, tie, l_value)
    items = [PathTrace(trace, hops, number) for number, trace in enumerate(traces.values())]
    starts = [_start(item, ties, settings, decimal_year(start_time)) for item in items]
    fit = fit_stroke(
        items,
        start=[(start_l, density) for start_l, density, _ in starts],
        lightning_time_s=float(np.median([time_s for _, _, time_s in starts])),
        model=model,
        ties=ties,
    )
    stroke = Stroke(
        members=tuple(range(len(items))),
        hops=(hops,) * len(items),
        traces=tuple(items),
        fit=fit,
        sferic=sferic,
        sferic_probability=1.0 if sferic else 0.0,
    )
    rows = stroke_rows(
        stroke,
        [Sighting()] * len(items),
        group=1,
        recording=recording,
        model=model,
        ties=ties,
        settings=settings,
        receiver_latitude_rad=latitude_rad,
    )
    return [replace(row, time=_clock(start_time, row.sferic_time_s)) for row in rows]


def _clock(start_time: datetime | None, time_s: float) -> str | None:
    if start_time is None or not np.isfinite(time_s):
        return None
    return iso_time(start_time + timedelta(seconds=time_s))


def _check(traces: dict[str, Trace]) -> None:
    for name, trace in traces.items():
        if len(np.unique(trace.frequency_hz)) < LEAST_POINTS:
            reason = f"trace {name!r} has {len(trace.time_s)} points"
            step = f"pick at least {LEAST_POINTS} different frequencies"
            raise UsageError(Notice("E604", name, reason, step))


def _start(
    item: PathTrace, ties: Ties, settings: Settings, year: float
) -> tuple[float, float, float]:
    """Best of a coarse grid over L and density, the time fitted or given: L, density, time."""
    model = field_line_model(settings, decimal_year=year)
    trace = item.trace
    top_l = float(model.dipole.l_from_equatorial_gyrofrequency(1.1 * trace.frequency_hz.max()))
    wanted = ties.l_value
    l_grid = [wanted] if wanted else np.linspace(1.4, min(6.5, max(top_l, 1.5)), 40)
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
