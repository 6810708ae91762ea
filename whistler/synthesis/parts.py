"""The frozen parts of a synthetic background and the receiver.

Levels need one unit. The *noise unit* is the r.m.s. of the white receiver noise in a bandwidth of
10 kHz; it is 1, amplitudes are multiples of it, and level_db fields are spectral densities over the
receiver noise's. Nothing depends on the sampling rate but what lies above its half.
"""

from __future__ import annotations

from dataclasses import dataclass

from whistler.errors import Notice, UsageError

KEYINGS = ("steady", "keyed", "swept")


def refuse(part: object, name: str, *, why: str, next_step: str) -> UsageError:
    """Return the error for a field of a scene part that cannot be meant.

    Parameters
    ----------
    part : object
        The dataclass instance.
    name : str
        Name of its field.
    why, next_step : str
        What is wrong with the value, and what to do.

    Returns
    -------
    UsageError
        To be raised by the caller.
    """
    value = getattr(part, name)
    reason = f"{type(part).__name__}.{name}={value!r} {why}"
    return UsageError(Notice("E610", name, reason, next_step))


def check_ranges(part: object, **ranges: tuple[float, float]) -> None:
    """Check fields of a scene part against inclusive ranges; None passes.

    Parameters
    ----------
    part : object
        The dataclass instance.
    **ranges : tuple of float
        Lowest and highest allowed value of each named field.

    Raises
    ------
    UsageError
        Naming the first field outside its range.
    """
    for name, (low, high) in ranges.items():
        value = getattr(part, name)
        if value is not None and not low <= value <= high:
            raise refuse(
                part, name, why=f"is outside {low:g} to {high:g}", next_step="correct the scene"
            )


@dataclass(frozen=True)
class Noise:
    """Stationary noise: the receiver's own, and the sum of all strokes too weak to stand out.

    Parameters
    ----------
    atmospheric_db : float
        Density of the atmospheric part at its strongest frequency, dB over the receiver's.
    """

    atmospheric_db: float = 9.0

    def __post_init__(self) -> None:
        """Check the range."""
        check_ranges(self, atmospheric_db=(-200, 80))


@dataclass(frozen=True)
class Sferics:
    """A population of lightning pulses that reached the receiver through the waveguide.

    Parameters
    ----------
    rate_hz : float
        Mean number a second.
    median_peak : float
        Median peak amplitude, noise units.
    spread_db : float
        Standard deviation of the amplitude in dB (lognormal).
    clustering : float
        Share of pulses that are later strokes of a flash, 0 to 0.8.
    near_m, far_m : float
        Range of distances, drawn uniformly in the logarithm.
    reflection_height_m : float
        Height of the guide; its first cutoff is c / (2 height).
    tweek_db : float
        Strength of the slightly damped night-time mode that makes tweeks, dB.
    start_s, duration_s : float, float or None
        When the population is active; None lasts to the end.
    """

    rate_hz: float = 20.0
    median_peak: float = 40.0
    spread_db: float = 7.0
    clustering: float = 0.3
    near_m: float = 600e3
    far_m: float = 9000e3
    reflection_height_m: float = 86e3
    tweek_db: float = -22.0
    start_s: float = 0.0
    duration_s: float | None = None

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(
            self, rate_hz=(0, 500), median_peak=(0, 1e5), spread_db=(0, 20), clustering=(0, 0.8),
            near_m=(20e3, 15e6), far_m=(20e3, 19e6), reflection_height_m=(60e3, 100e3),
            tweek_db=(-80, 20), start_s=(0, 1e5), duration_s=(0, 1e5),
        )  # fmt: skip
        if self.far_m < self.near_m:
            raise refuse(self, "far_m", why="is below near_m", next_step="swap them")


@dataclass(frozen=True)
class Mains:
    """Harmonics of the public power supply.

    Parameters
    ----------
    frequency_hz : float
        Nominal fundamental, 50 or 60 Hz.
    drift_hz : float
        Largest excursion of the fundamental, Hz.
    level : float
        R.m.s. of the sum, noise units.
    harmonics : int
        Number of harmonics; their amplitude falls with order, odd ones are stronger.
    steps_per_minute : float
        Load switchings that change all harmonics at once and click.
    """

    frequency_hz: float = 50.0
    drift_hz: float = 0.04
    level: float = 12.0
    harmonics: int = 50
    steps_per_minute: float = 0.0

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(
            self, frequency_hz=(45, 65), drift_hz=(0, 0.5), level=(0, 1e4), harmonics=(1, 120),
            steps_per_minute=(0, 600),
        )  # fmt: skip


@dataclass(frozen=True)
class Hiss:
    """A band of natural hiss.

    Parameters
    ----------
    low_hz, high_hz : float
        Band.
    level_db : float
        Density over the receiver noise.
    modulation : float
        R.m.s. of its slow variation, as a share of its amplitude.
    """

    low_hz: float = 1500.0
    high_hz: float = 3000.0
    level_db: float = 10.0
    modulation: float = 0.3

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(self, low_hz=(0, 1e5), high_hz=(0, 1e5), level_db=(-40, 80), modulation=(0, 2))
        if self.high_hz <= self.low_hz:
            raise refuse(self, "high_hz", why="is not above low_hz", next_step="swap them")


@dataclass(frozen=True)
class Chorus:
    """Clusters of rising and falling tones.

    Parameters
    ----------
    rate_hz : float
        Mean number of elements a second.
    low_hz, high_hz : float
        Range in which elements start.
    level_db : float
        Strength of an element in a 21.3 ms cell over the receiver noise, typical.
    falling_share : float
        Share of elements that fall, 0 to 1.
    """

    rate_hz: float = 1.0
    low_hz: float = 1000.0
    high_hz: float = 4000.0
    level_db: float = 18.0
    falling_share: float = 0.3

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(
            self, rate_hz=(0, 50), low_hz=(300, 2e4), high_hz=(300, 2e4), level_db=(-20, 60),
            falling_share=(0, 1),
        )  # fmt: skip


@dataclass(frozen=True)
class Transmitter:
    """A narrow-band transmitter.

    Parameters
    ----------
    frequency_hz : float
        Carrier.
    level_db : float
        Strength in a 21.3 ms cell over the receiver noise.
    keying : str
        ``steady``, ``keyed`` (on and off) or ``swept`` (saw-tooth over `span_hz`).
    period_s : float
        Period of the keying or of the sweep.
    span_hz : float
        Width of the sweep; negative falls.
    """

    frequency_hz: float = 9000.0
    level_db: float = 20.0
    keying: str = "keyed"
    period_s: float = 1.6
    span_hz: float = 2000.0

    def __post_init__(self) -> None:
        """Check the ranges and the keying."""
        check_ranges(
            self,
            frequency_hz=(100, 1e5),
            level_db=(-20, 80),
            period_s=(0.01, 1e4),
            span_hz=(-1e5, 1e5),
        )
        if self.keying not in KEYINGS:
            raise refuse(
                self, "keying", why=f"is not one of {', '.join(KEYINGS)}", next_step="choose one"
            )


@dataclass(frozen=True)
class Dropout:
    """A stretch whose samples are not numbers.

    Parameters
    ----------
    start_s, duration_s : float
        Where it lies, s from the first sample.
    """

    start_s: float
    duration_s: float

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(self, start_s=(0, 1e5), duration_s=(0, 1e5))


@dataclass(frozen=True)
class Receiver:
    """Band, gain, clipping and word length.

    Parameters
    ----------
    low_cut_hz : float
        Corner of the second-order high-pass.
    full_scale : float or None
        Amplitude that reaches full scale, noise units; larger ones clip. None sets the strongest
        sample 1 dB below full scale.
    bits : int
        Word length of the converter.
    dropouts : tuple of Dropout
        Stretches replaced by NaN; such a scene cannot be written as FLAC.
    """

    low_cut_hz: float = 150.0
    full_scale: float | None = None
    bits: int = 16
    dropouts: tuple[Dropout, ...] = ()

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(self, low_cut_hz=(5, 2000), full_scale=(1e-3, 1e9), bits=(4, 24))
