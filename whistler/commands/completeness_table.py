"""The document of a completeness run as text of at most 80 columns."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

HOUR_S = 3600.0
LEGEND = (
    "dB      strength: power over noise in a 21.3 ms cell on the trace, as `snr_db`",
    "found   a row within 30 ms of the true curve; (..) 95 % intervals",
    "L, UTC  over all strengths injected",
)


def completeness_text(document: dict[str, Any]) -> str:
    """Return the tables and figures of a completeness document.

    Parameters
    ----------
    document : dict
        From :func:`whistler.scores.completeness_document`.

    Returns
    -------
    str
        Lines of at most 80 characters.
    """
    used = len(document["recordings"])
    audio = _length(document["own_rows"]["live_time_s"])
    low_db, high_db = document["request"]["snr_range_db"]
    lines = [
        f"{document['injected']} whistlers of {low_db:g} to {high_db:g} dB injected into "
        f"{audio} of {used} recording{'' if used == 1 else 's'}",
        "",
        *_beside(_table("thin, dB", document["by_strength_thin"]), _right(document)),
        "",
        *_reached(document, "thin"),
        *_reached(document, "diffuse"),
        "",
        *_quality(document),
        "",
        *_rates(document),
        "",
        *LEGEND,
    ]
    return "\n".join(line.rstrip() for line in lines)


def _table(title: str, bins: Sequence[dict[str, Any]], *, hours: bool = False) -> list[str]:
    """Lines of one table of shares, 39 characters wide."""
    lines = [f"{title:>13}  inj found share (95 %)"]
    for item in bins:
        low, high = item["low"], item["high"]
        edges = f"{low:02.0f}-{high:02.0f}" if hours else f"{low:.3g} to {high:.3g}"
        numbers = f"{item['injected']:4d} {item['found']:5d}"
        lines.append(f"{edges:>13} {numbers} {_percent(item)}")
    return lines


def _right(document: dict[str, Any]) -> list[str]:
    """The tables of the right column."""
    lines = [
        *_table("diffuse, dB", document["by_strength_diffuse"]),
        "",
        *_table("L", document["by_l"]),
    ]
    if document["by_hour"]:
        lines += ["", *_table("UTC", document["by_hour"], hours=True)]
    return lines


def _beside(left: Sequence[str], right: Sequence[str]) -> list[str]:
    count = max(len(left), len(right))
    left = [*left, *[""] * (count - len(left))]
    right = [*right, *[""] * (count - len(right))]
    return [f"{a:<41}{b}" for a, b in zip(left, right, strict=True)]


def _percent(item: dict[str, Any]) -> str:
    """Share and interval, in per cent, 14 characters wide."""
    if item["share"] is None:
        return f"{'-':>5}"
    low, high = (100 * end for end in item["interval"])
    return f"{100 * item['share']:3.0f} % ({low:.0f}-{high:.0f})"


def _reached(document: dict[str, Any], kind: str) -> list[str]:
    """Where the shares of one kind are reached."""
    range_db = document["request"]["snr_range_db"]
    parts = [_where(item, range_db=range_db) for item in document["strength_found"][kind]]
    return [f"{'' if number else kind:<16}{text}" for number, text in enumerate(parts)]


def _where(item: dict[str, Any], *, range_db: Sequence[float]) -> str:
    """Where one share is reached, or on which side of the strengths injected."""
    (low_db, high_db), share = range_db, f"{100 * item['share']:.0f} %"
    if item["reached"] is None:
        return f"{share}: too few injected to tell"
    if item["reached"] == "below":
        return f"{share} found below {low_db:g} dB already; inject weaker (--snr-range)"
    if item["reached"] == "above":
        return f"{share} not reached up to {high_db:g} dB"
    low, high = item["interval_db"]
    begin = f"under {low_db:g}" if low is None else f"{low:.1f}"
    end = f"over {high_db:g}" if high is None else f"{high:.1f}"
    return f"{share} found at {item['strength_db']:.1f} dB ({begin} to {end})"


def _quality(document: dict[str, Any]) -> list[str]:
    timing, excess_db = document["timing"], document["snr_excess_db"]
    lines = []
    if timing["median_s"] is not None:
        median_ms, most_ms = 1e3 * timing["median_s"], 1e3 * timing["percentile_90_s"]
        lines += [
            f"{'timing':<16}median {median_ms:.1f} ms off the true curve, 90 % within "
            f"{most_ms:.1f} ms",
            f"{'dB column':<16}median {excess_db:+.1f} dB off the injected strength",
        ]
    named = {
        "hops right": "hops_right",
        "sferic seen": "sferic_identified",
        "sferic right": "sferic_right",
        "status ok": "determined",
    }
    lines += [
        f"{title:<16}{_percent(document[name])} of {document[name]['of']}"
        for title, name in named.items()
    ]
    for title, name in (("L", "l_value"), ("density", "equatorial_density_cm3")):
        part = document["coverage"][name]
        one, two = (_percent(part[word]) for word in ("one_sigma", "1.96_sigma"))
        lines.append(
            f"{title + ' within':<16}1 sigma {one}, 1.96 sigma {two} of {part['one_sigma']['of']}"
        )
    return lines


def _rates(document: dict[str, Any]) -> list[str]:
    words = {
        "false_alarms": ("false alarms", "of audio played backwards"),
        "extra_rows": ("extra rows", "with whistlers injected"),
        "own_rows": ("your own rows", "as recorded"),
    }
    return [_rate(title, document[name], of) for name, (title, of) in words.items()]


def _rate(title: str, item: dict[str, Any], of: str) -> str:
    hours = _length(item["live_time_s"])
    if item["per_hour"] is None:
        return f"{title:<16}{item['count']} in {hours} {of}"
    low, high = (_number(end) for end in item["interval_per_hour"])
    rate = f"{_number(item['per_hour'])} an hour ({low} to {high})"
    return f"{title:<16}{item['count']} in {hours} {of}: {rate}"


def _number(value: float) -> str:
    """Return a number with two digits or more, never with an exponent."""
    return f"{value:.0f}" if value >= 10.0 else f"{value:.1f}" if value >= 1.0 else f"{value:.2g}"


def _length(time_s: float) -> str:
    """Return a length of time with its unit."""
    return f"{time_s:.0f} s" if time_s < 0.1 * HOUR_S else f"{time_s / HOUR_S:.2f} h"
