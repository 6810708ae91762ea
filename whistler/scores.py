"""The figures of a completeness run: its document, its table of whistlers, its files."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from whistler import __version__
from whistler.catalogue import SCHEMA
from whistler.clock import iso_time
from whistler.completeness import Completeness, Request
from whistler.proportions import (
    Crossing,
    Interval,
    Share,
    ShareCurves,
    binned,
    binomial_interval,
    poisson_interval,
    strength_at,
)
from whistler.recovery import MATCHING_RULE, Injection
from whistler.rows import TIME_DECIMALS, plain

STRENGTH_RULE = (
    "median over the band of power in the 21.3 ms Hann cell on the true curve over the noise "
    "there; noise: median power of cells without sferics over ln 2, mains taken out"
)
INTERVAL_RULE = "95 %: Clopper-Pearson for shares, exact Poisson for rates"
ORIGIN_RULE = "stroke at the conjugate foot (odd hops) or near the receiver, default model"
THIN_STEP_DB, DIFFUSE_STEP_DB = 1.0, 3.0  # diffuse traces are few
MOST_STRENGTH_BINS = 16
L_BINS = 6
SHARES = (0.5, 0.9)
SFERIC_S = 0.005
SIGMAS = {"one_sigma": 1.0, "1.96_sigma": 1.96}
HOUR_S = 3600.0


def share_curves(result: Completeness) -> ShareCurves:
    """Return the shares found by strength, L and hour."""
    thin = [item for item in result.injections if not item.diffuse]
    thick = [item for item in result.injections if item.diffuse]
    dated = [item for item in result.injections if item.time is not None]
    hours = [float(item.time.hour) for item in dated if item.time is not None]
    by_hour = binned(hours, _found(dated), edges=np.arange(25.0))
    l_values = [item.truth.l_value for item in result.injections]
    return ShareCurves(
        thin=_by_strength(thin, result.request, step_db=THIN_STEP_DB),
        diffuse=_by_strength(thick, result.request, step_db=DIFFUSE_STEP_DB),
        thin_crossings=_crossings(thin, result.request),
        diffuse_crossings=_crossings(thick, result.request),
        by_l=binned(
            l_values,
            _found(result.injections),
            edges=np.linspace(*result.request.l_range, L_BINS + 1),
        ),
        by_hour=tuple(hour for hour in by_hour if hour.tried),
    )


def completeness_document(result: Completeness, *, folder: str) -> dict[str, Any]:
    """Return the document that ``whistler completeness --json`` prints.

    Parameters
    ----------
    result : Completeness
        The run.
    folder : str
        The folder as given.

    Returns
    -------
    dict
        Plain values; what is not known is None.
    """
    curves = share_curves(result)
    found = [item for item in result.injections if item.found]
    return {
        "schema": SCHEMA,
        "software": {"name": "whistler", "version": __version__},
        "settings": result.settings.to_dict(),
        **run_key(folder, result.request),
        "definitions": {
            "strength": STRENGTH_RULE,
            "found": MATCHING_RULE,
            "interval": INTERVAL_RULE,
            "injected": ORIGIN_RULE,
        },
        "recordings": [
            {
                "path": recording.path,
                "sha256": recording.digest_sha256,
                "start_time": iso_time(recording.start_time),
                "duration_s": plain(recording.duration_s, decimals=TIME_DECIMALS),
            }
            for recording in result.recordings
        ],
        "refused": [{"path": item.path, "reason": str(item)} for item in result.refused],
        "injected": len(result.injections),
        "found": len(found),
        "rejected": result.tally.rejected,
        "by_strength": _bins(_by_strength(result.injections, result.request, step_db=THIN_STEP_DB)),
        "by_strength_thin": _bins(curves.thin),
        "by_strength_diffuse": _bins(curves.diffuse),
        "by_l": _bins(curves.by_l),
        "by_hour": _bins(curves.by_hour),
        "strength_found": {
            "thin": [_crossing(item) for item in curves.thin_crossings],
            "diffuse": [_crossing(item) for item in curves.diffuse_crossings],
        },
        **_quality(found),
        **_rates(result),
    }


def run_key(folder: str, request: Request) -> dict[str, Any]:
    """Return what tells one run from another, beside its settings."""
    return {
        "folder": folder,
        "request": {
            "injections": request.injections,
            "seed": request.seed,
            "l_range": list(request.l_range),
            "snr_range_db": list(request.snr_range_db),
        },
    }


def _found(injections: Iterable[Injection]) -> list[bool]:
    return [item.found for item in injections]


def _by_strength(
    injections: Sequence[Injection], request: Request, *, step_db: float
) -> tuple[Share, ...]:
    low, high = request.snr_range_db
    count = min(max(round((high - low) / step_db), 1), MOST_STRENGTH_BINS)
    strengths = [item.truth.snr_db for item in injections]
    return binned(strengths, _found(injections), edges=np.linspace(low, high, count + 1))


def _crossings(injections: Sequence[Injection], request: Request) -> tuple[Crossing, ...]:
    strengths, found = [item.truth.snr_db for item in injections], _found(injections)
    return tuple(
        strength_at(share, strength_db=strengths, hits=found, range_db=request.snr_range_db)
        for share in SHARES
    )


def _quality(found: Sequence[Injection]) -> dict[str, Any]:
    """How good the rows of found whistlers are."""
    pairs = [(item.truth, item.row) for item in found if item.row is not None]
    errors_s = [item.time_error_s for item in found]
    identified = [(truth, row) for truth, row in pairs if row.sferic_seen]
    heard = [row.sferic_seen for truth, row in pairs if truth.sferic_seen]
    sure = [(truth, row) for truth, row in pairs if row.uncertainty_status == "ok"]
    pulls = {
        name: [
            (getattr(row, name) - getattr(truth, name)) / getattr(row, sd) for truth, row in sure
        ]
        for name, sd in _SIGMA_OF.items()
    }
    return {
        "timing": {
            "median_s": _quantile(errors_s, 0.5, decimals=TIME_DECIMALS),
            "percentile_90_s": _quantile(errors_s, 0.9, decimals=TIME_DECIMALS),
        },
        "snr_excess_db": _quantile([row.snr_db - truth.snr_db for truth, row in pairs], 0.5),
        "hops_right": _share(truth.hops == row.hops for truth, row in pairs),
        "sferic_identified": _share(heard),
        "sferic_right": _share(
            abs(row.sferic_time_s - truth.sferic_time_s) <= SFERIC_S for truth, row in identified
        ),
        "determined": _share(row.uncertainty_status == "ok" for _, row in pairs),
        "coverage": {
            name: {
                word: _share(abs(pull) <= sigmas for pull in values)
                for word, sigmas in SIGMAS.items()
            }
            for name, values in pulls.items()
        },
    }


def _rates(result: Completeness) -> dict[str, Any]:
    tally = result.tally
    return {
        "false_alarms": _rate(tally.false_rows, tally.reversed_s),
        "extra_rows": _rate(tally.extra_rows, tally.injected_s),
        "own_rows": _rate(tally.rows, tally.live_s),
    }


def _rate(count: int, live_s: float) -> dict[str, Any]:
    hours = live_s / HOUR_S
    per_hour = 1.0 / hours if hours > 0.0 else math.nan
    limits = poisson_interval(count)
    ends = Interval(limits.low * per_hour, limits.high * per_hour)
    return {
        "count": count,
        "live_time_s": plain(live_s, decimals=TIME_DECIMALS),
        "per_hour": plain(count * per_hour),
        "interval_per_hour": _interval(ends),
    }


def _share(hits: Iterable[bool]) -> dict[str, Any]:
    listed = [bool(hit) for hit in hits]
    count, of = sum(listed), len(listed)
    return {
        "count": count,
        "of": of,
        "share": plain(count / of) if of else None,
        "interval": _interval(binomial_interval(count, of)),
    }


def _bins(bins: Iterable[Share]) -> list[dict[str, Any]]:
    return [
        {
            "low": plain(item.low),
            "high": plain(item.high),
            "injected": item.tried,
            "found": item.hits,
            "share": plain(item.share),
            "interval": _interval(item.interval),
        }
        for item in bins
    ]


def _crossing(item: Crossing) -> dict[str, Any]:
    return {
        "share": item.share,
        "reached": item.reached,
        "strength_db": plain(item.strength_db, decimals=2),
        "interval_db": [
            plain(item.interval_db.low, decimals=2),
            plain(item.interval_db.high, decimals=2),
        ],
    }


def _interval(interval: Interval) -> list[float | None]:
    return [plain(interval.low), plain(interval.high)]


def _quantile(values: Sequence[float], share: float, *, decimals: int = 2) -> Any:
    return plain(np.quantile(values, share), decimals=decimals) if values else None


_SIGMA_OF = {
    "l_value": "l_value_sd",
    "equatorial_density_cm3": "equatorial_density_sd_cm3",
}
