"""Fit points that a person picked, or edited: rows of results made again with other points."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import datetime, timedelta
from typing import Any

import numpy as np

from fieldlines.errors import FloatArray
from whistler.clock import decimal_year, parse_time
from whistler.edit import Edit, apply_edits, same_points
from whistler.errors import Notice, UsageError
from whistler.fit import model_curve
from whistler.handfit import HandStroke, Start, check_points, fit_by_hand, hop_orders
from whistler.model import field_line_model
from whistler.picks import RANGES
from whistler.problem import L_LIMITS, PathTrace
from whistler.results import DIFFUSE_S, Sighting
from whistler.rows import WhistlerRow, row_model
from whistler.settings import Settings
from whistler.trace import Trace

SFERIC_SD_S = 0.002  # of a sferic read off by hand
EDITED, BESIDE_EDITED = "edited", "group-edited"


def fit_picks(
    traces: Mapping[str, Trace],
    edits: Sequence[Edit] = (),
    *,
    settings: Settings,
    recording: str = "picks",
    hops: int | Sequence[int] = 1,
    start_time: datetime | None = None,
    sferic_time_s: float | None = None,
    sferic_time_sd_s: float = SFERIC_SD_S,
    lightning_time_s: float | None = None,
    l_value: float | None = None,
) -> list[WhistlerRow]:
    """Return L and density of hand-picked traces, taken as paths of one stroke.

    Parameters
    ----------
    traces : mapping of str to Trace
        Points by name, times from one common zero.
    edits : sequence of Edit
        Made to the traces first, in this order.
    settings : Settings
        Model and declared one-sigmas.
    recording : str
        What to call the source.
    hops : int or sequence of int
        Field-line crossings of every trace, or of each.
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
        One for each trace, with the flag ``edited`` where its points are not those handed in.

    Raises
    ------
    UsageError
        When an edit cannot be made, a trace has fewer than three points, or a time or L is outside
        its range.
    """
    check_ties(sferic_time_s, sferic_time_sd_s, lightning_time_s=lightning_time_s, l_value=l_value)
    edited = apply_edits(traces, edits)
    check_points(edited)
    orders = hop_orders(hops, len(edited))
    items = [
        PathTrace(trace, order, path)
        for path, (trace, order) in enumerate(zip(edited.values(), orders, strict=True))
    ]
    task = HandStroke(
        items=tuple(items),
        sferic_s=_sferic(sferic_time_s, sferic_time_sd_s),
        lightning_time_s=lightning_time_s,
        l_value=l_value,
        settings=replace(settings, l_range=L_LIMITS),  # picks need not lie where the search looks
        zero=start_time,
        recording=recording,
        sightings=(Sighting(),) * len(items),
        sferic_probability=0.0 if sferic_time_s is None else 1.0,
    )
    rows = fit_by_hand(task, {})
    return _flagged(rows, list(traces.values()), earlier=[()] * len(rows))


def refit(
    rows: Sequence[WhistlerRow],
    edits: Sequence[Edit] = (),
    *,
    settings: Settings | None = None,
    hops: int | Sequence[int] | None = None,
    free_time: bool = False,
    sferic_time_s: float | None = None,
    sferic_time_sd_s: float = SFERIC_SD_S,
    lightning_time_s: float | None = None,
    l_value: float | None = None,
) -> list[WhistlerRow]:
    """Return the rows of one measured stroke fitted again, after edits of their trace points.

    Parameters
    ----------
    rows : sequence of WhistlerRow
        All rows of one stroke; an edit's `trace` counts them from 1.
    edits : sequence of Edit
        In the order in which they are made; none accepts the points as they are.
    settings : Settings, optional
        Those of the measurement; the defaults if left out.
    hops : int or sequence of int, optional
        Field-line crossings of every row, or of each, in place of the measured ones.
    free_time : bool
        Whether to leave out the sferic that was identified.
    sferic_time_s, sferic_time_sd_s : float, optional
        Another causative sferic and its one-sigma.
    lightning_time_s : float, optional
        Time of the lightning itself, when it is known from elsewhere.
    l_value : float, optional
        L to hold the paths at.

    Returns
    -------
    list of WhistlerRow
        In the same order: with the flag ``edited`` where the points are not those of the row, and
        ``group-edited`` where only those of another one are. What the search alone can tell,
        strength and significance, stays as measured.

    Raises
    ------
    UsageError
        When the rows are of several strokes, an edit cannot be made, a trace has fewer than three
        points, or a time or L is outside its range.
    """
    settings = settings or Settings()
    check_ties(sferic_time_s, sferic_time_sd_s, lightning_time_s=lightning_time_s, l_value=l_value)
    _check_stroke(rows)
    edited = apply_edits({str(k): row.trace for k, row in enumerate(rows, start=1)}, edits)
    check_points(edited)
    orders = hop_orders(hops, len(rows)) if hops is not None else tuple(row.hops for row in rows)
    items = _items(rows, list(edited.values()), orders)
    sferic_s = _sferic(sferic_time_s, sferic_time_sd_s)
    probability = 0.0 if sferic_s is None else 1.0
    if sferic_s is None and not free_time:
        probability = rows[0].sferic_probability
        if rows[0].sferic_seen:
            sferic_s = (rows[0].sferic_time_s, rows[0].sferic_time_sd_s)
    searched = any(np.isfinite(row.significance) for row in rows)
    task = HandStroke(
        items=items,
        sferic_s=sferic_s,
        lightning_time_s=lightning_time_s,
        l_value=l_value,
        settings=settings if searched else replace(settings, l_range=L_LIMITS),
        zero=time_zero(rows),
        recording=rows[0].recording,
        group=rows[0].group,
        sightings=tuple(_sighting(row) for row in rows),
        sferic_probability=probability,
        hop_probability=rows[0].hop_probability if hops is None else 1.0,
    )
    found = fit_by_hand(task, _known(rows, items) if l_value is None else {})
    return _flagged(found, [row.trace for row in rows], earlier=[row.flags for row in rows])


def check_ties(
    sferic_time_s: float | None,
    sferic_time_sd_s: float,
    *,
    lightning_time_s: float | None,
    l_value: float | None,
) -> None:
    """Refuse times and an L that no fit can be tied to; None passes.

    Parameters
    ----------
    sferic_time_s, sferic_time_sd_s : float
        Causative sferic and its one-sigma.
    lightning_time_s : float, optional
        Time of the lightning itself.
    l_value : float, optional
        L to hold the paths at.

    Raises
    ------
    UsageError
        Naming the first that is no number within its range, as the option it is given with.
    """
    given: tuple[tuple[str, Any, tuple[float, float]], ...] = (  # a stored one may be anything
        ("--sferic-time", sferic_time_s, RANGES["time_s"]),
        ("--sferic-time-sd", sferic_time_sd_s, RANGES["time_sd_s"]),
        ("--lightning-time", lightning_time_s, RANGES["time_s"]),
        ("--l-value", l_value, L_LIMITS),
    )
    for option, value, (low, high) in given:
        if value is not None and not (
            isinstance(value, int | float | np.number) and low <= value <= high
        ):
            reason = f"{value} is not a number from {low:g} to {high:g}"
            raise UsageError(Notice("E601", option, reason, "choose a number in that range"))


def time_zero(rows: Sequence[WhistlerRow]) -> datetime | None:
    """Return the time from which the rows' times count, UTC; None when they have no clock time."""
    for row in rows:
        if row.time is not None and np.isfinite(row.sferic_time_s):
            return parse_time(row.time) - timedelta(seconds=row.sferic_time_s)
    return None


def left_over_s(row: WhistlerRow, *, settings: Settings) -> FloatArray:
    """Return trace minus model at each point of a row, s; NaN where the row does not tell it.

    Parameters
    ----------
    row : WhistlerRow
        As measured or fitted.
    settings : Settings
        What with.
    """
    numbers = (row.l_value, row.equatorial_density_cm3, row.lightning_time_s)
    if not np.isfinite(numbers).all():
        return np.full(len(row.trace.time_s), np.nan)
    default = field_line_model(settings, decimal_year=decimal_year(time_zero([row])))
    return row.trace.time_s - model_curve(
        row.trace.frequency_hz,
        l_value=row.l_value,
        density_m3=1e6 * row.equatorial_density_cm3,
        hops=row.hops,
        lightning_time_s=row.lightning_time_s,
        model=row_model(row, default=default),
    )


def _flagged(
    rows: Sequence[WhistlerRow], stored: Sequence[Trace], *, earlier: Sequence[Sequence[str]]
) -> list[WhistlerRow]:
    """Say which rows were edited, now or before, and which were only fitted with such."""
    own = [
        EDITED in flags or not same_points(row.trace, trace)
        for row, trace, flags in zip(rows, stored, earlier, strict=True)
    ]
    if not any(own):
        return list(rows)
    words = [EDITED if edited else BESIDE_EDITED for edited in own]
    return [replace(row, flags=(*row.flags, word)) for row, word in zip(rows, words, strict=True)]


def _items(
    rows: Sequence[WhistlerRow], traces: Sequence[Trace], orders: Sequence[int]
) -> tuple[PathTrace, ...]:
    """Give each trace its path: echoes share numbers, never a number of hops."""
    paths: list[tuple[str, list[int]]] = []
    items = []
    for row, trace, order in zip(rows, traces, orders, strict=True):
        key = repr((row.l_value, row.equatorial_density_cm3, row.dispersion_s_sqrt_hz))
        place = len(paths)
        if "echo" in row.flags:
            shared = (
                k for k, (other, used) in enumerate(paths) if other == key and order not in used
            )
            place = next(shared, place)
        if place == len(paths):
            paths.append((key if "echo" in row.flags else "", []))
        paths[place][1].append(order)
        share = row.centre_share_sd if np.isfinite(row.centre_share_sd) else 0.0
        items.append(PathTrace(trace, order, place, share))
    return tuple(items)


def _known(rows: Sequence[WhistlerRow], items: Sequence[PathTrace]) -> dict[int, Start]:
    """Start from the stored numbers of each path whose points and hops are as stored."""
    known: dict[int, Start] = {}
    changed = set()
    for row, item in zip(rows, items, strict=True):
        start = (row.l_value, 1e6 * row.equatorial_density_cm3, row.lightning_time_s)
        known[item.path] = start
        if item.hops != row.hops or not same_points(item.trace, row.trace):
            changed.add(item.path)
        if not np.isfinite(start).all():
            changed.add(item.path)
    return {path: start for path, start in known.items() if path not in changed}


def _sighting(row: WhistlerRow) -> Sighting:
    thickness_s = 2.0 * DIFFUSE_S if "diffuse" in row.flags else 0.0  # all that is kept of it
    return Sighting(row.snr_db, row.significance, thickness_s)


def _sferic(time_s: float | None, sd_s: float) -> tuple[float, float] | None:
    return None if time_s is None else (time_s, sd_s)


def _check_stroke(rows: Sequence[WhistlerRow]) -> None:
    strokes = {(row.recording, row.group) for row in rows}
    if len(strokes) != 1:
        reason = f"rows of {len(strokes)} strokes" if strokes else "no rows"
        raise UsageError(Notice("E609", "rows", reason, "hand in all rows of one group"))
