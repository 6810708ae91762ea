"""What is true about a synthetic recording, and its JSON document."""

from __future__ import annotations

import json
from dataclasses import dataclass, fields
from typing import Any

import numpy as np

from fieldlines.errors import FloatArray

#: Version of the truth document.
TRUTH_SCHEMA = 1


@dataclass(frozen=True)
class TraceTruth:
    """True arrival against frequency.

    Parameters
    ----------
    frequency_hz, time_s : ndarray, shape (n,)
        Frequency, and time from the first sample.
    """

    frequency_hz: FloatArray
    time_s: FloatArray


@dataclass(frozen=True)
class WhistlerTruth:
    """One hop of one path, with the names of the catalogue.

    Parameters
    ----------
    group : int
        Number of the stroke.
    hops : int
        Field-line crossings.
    l_value, equatorial_density_cm3 : float
        Of the path.
    lightning_time_s, sferic_time_s : float
        Stroke, and arrival of the front of its sferic at the receiver, s from the first sample.
    sferic_seen : bool
        Whether the stroke's sferic was put into the recording.
    sferic_peak : float
        Its peak amplitude, noise units.
    snr_db : float
        Cell SNR as set (`whistler.synthesis.level`).
    frequency_low_hz, frequency_high_hz : float
        Band limits (half amplitude).
    spread_s : float
        R.m.s. thickness in mid-band for this number of crossings, s.
    equatorial_gyrofrequency_hz : float
        Of the path.
    complete : bool
        Whether the whole trace lies inside the recording.
    trace : TraceTruth
        The curve, from the derivative of the phase that was synthesised.
    """

    group: int
    hops: int
    l_value: float
    equatorial_density_cm3: float
    lightning_time_s: float
    sferic_time_s: float
    sferic_seen: bool
    sferic_peak: float
    snr_db: float
    frequency_low_hz: float
    frequency_high_hz: float
    spread_s: float
    equatorial_gyrofrequency_hz: float
    complete: bool
    trace: TraceTruth


@dataclass(frozen=True)
class Truth:
    """Everything true about a recording.

    Parameters
    ----------
    scene : dict
        The scene as plain values: with the software version it makes the recording again.
    duration_s, sample_rate_hz : float, int
        Length and sampling rate.
    full_scale : float
        Amplitude of a sample of 1.0, noise units.
    sferic_count : int
        Background sferics put in.
    whistlers : tuple of WhistlerTruth
        In order of stroke, path and hop.
    """

    scene: dict[str, Any]
    duration_s: float
    sample_rate_hz: int
    full_scale: float
    sferic_count: int
    whistlers: tuple[WhistlerTruth, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return the document as plain values: times to 1 us, frequencies to 1 mHz."""
        return {
            "schema": TRUTH_SCHEMA,
            "name": self.scene["name"],
            "shows": self.scene["shows"],
            "duration_s": self.duration_s,
            "sample_rate_hz": self.sample_rate_hz,
            "full_scale": float(f"{self.full_scale:.6g}"),
            "sferic_count": self.sferic_count,
            "whistlers": [_row(whistler) for whistler in self.whistlers],
            "scene": self.scene,
        }

    def to_json(self) -> str:
        """Return the document as text, the same bytes for the same truth."""
        return json.dumps(self.to_dict(), indent=1, allow_nan=False) + "\n"


def _row(part: WhistlerTruth | TraceTruth) -> dict[str, Any]:
    return {item.name: _value(item.name, getattr(part, item.name)) for item in fields(part)}


def _value(name: str, value: Any) -> Any:
    if isinstance(value, TraceTruth):
        return _row(value)
    digits = 3 if name.endswith(("_hz", "_db", "_peak")) else 6
    if isinstance(value, np.ndarray):
        return [round(float(item), digits) for item in value]
    return round(value, digits) if isinstance(value, float) else value
