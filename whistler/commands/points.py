"""Points of traces as a table of at most 80 columns."""

from __future__ import annotations

import math
from collections.abc import Sequence

from whistler.pickfit import left_over_s
from whistler.rows import WhistlerRow
from whistler.settings import Settings

HEAD = "trace       Hz      time s     ± ms  resid ms"
NOTE = "resid: point minus fitted model"


def points_table(rows: Sequence[WhistlerRow], *, settings: Settings) -> str:
    """Return every point of the rows' traces, and what the fit leaves over.

    Parameters
    ----------
    rows : sequence of WhistlerRow
        Of one stroke; their traces count from 1.
    settings : Settings
        What they were fitted with.
    """
    lines = [HEAD]
    for number, row in enumerate(rows, start=1):
        left_s = left_over_s(row, settings=settings)
        points = zip(
            row.trace.frequency_hz, row.trace.time_s, row.trace.time_sd_s, left_s, strict=True
        )
        for frequency_hz, time_s, sd_s, rest_s in points:
            rest = f"{1e3 * rest_s:+.2f}" if math.isfinite(rest_s) else "-"
            lines.append(
                f"{number:5d} {frequency_hz:8.0f} {time_s:11.4f} {1e3 * sd_s:8.2f} {rest:>9}"
            )
    return "\n".join([*lines, "", NOTE])
