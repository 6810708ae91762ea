"""A whole synthetic recording as one frozen object; `scenefile` reads and writes it as TOML."""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from typing import Any, cast

from whistler.synthesis.parts import (
    Chorus,
    Hiss,
    Mains,
    Noise,
    Receiver,
    Sferics,
    Transmitter,
    check_ranges,
)
from whistler.synthesis.strokes import Medium, Stroke


@dataclass(frozen=True)
class Scene:
    """A whole synthetic recording.

    Parameters
    ----------
    duration_s : float
        Length, 0.5 to 1200 s: a recording is rendered in memory.
    sample_rate_hz : int
        Sampling rate.
    seed : int
        Seed of everything random in it.
    name, shows, station, campaign, start_time : str
        For people; `start_time` is ISO 8601 UTC. `name` is the stem of the files.
    medium : Medium
        What the whistlers travel through.
    strokes : tuple of Stroke
        The lightning that whistlers come from.
    noise, mains, receiver : Noise, Mains or None, Receiver
        The steady background and the receiver.
    sferics, hiss, chorus, transmitters : tuple
        Populations of background signals.

    Examples
    --------
    >>> Scene(duration_s=2.0, sample_rate_hz=16000, seed=1).frame_count
    32000
    """

    duration_s: float
    sample_rate_hz: int
    seed: int
    name: str = "scene"
    shows: str = ""
    station: str = ""
    campaign: str = ""
    start_time: str = ""
    medium: Medium = field(default_factory=Medium)
    strokes: tuple[Stroke, ...] = ()
    noise: Noise = field(default_factory=Noise)
    sferics: tuple[Sferics, ...] = ()
    mains: Mains | None = None
    hiss: tuple[Hiss, ...] = ()
    chorus: tuple[Chorus, ...] = ()
    transmitters: tuple[Transmitter, ...] = ()
    receiver: Receiver = field(default_factory=Receiver)

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(
            self, duration_s=(0.5, 1200), sample_rate_hz=(8000, 200_000), seed=(0, 2**63 - 1)
        )
        for stroke in self.strokes:
            check_ranges(stroke, lightning_time_s=(0, self.duration_s))

    @property
    def frame_count(self) -> int:
        """Number of samples."""
        return round(self.duration_s * self.sample_rate_hz)

    def to_dict(self) -> dict[str, Any]:
        """Return the scene as plain nested values, None and empty parts left out."""
        return cast(dict[str, Any], _plain(self))


def _plain(part: Any) -> Any:
    if isinstance(part, tuple):
        return [_plain(item) for item in part]
    if not hasattr(part, "__dataclass_fields__"):
        return part
    pairs = ((item.name, _plain(getattr(part, item.name))) for item in fields(part))
    return {name: value for name, value in pairs if value is not None and value != []}
