"""Everything that influences a number in the results, in one frozen object."""

from __future__ import annotations

from dataclasses import dataclass, field, fields
from typing import Any

from whistler.errors import Notice, UsageError
from whistler.station import Station

DENSITY_PRIORS = ("saturated", "none")
FIT_PRIORS = ("none", "climatology")


@dataclass(frozen=True)
class Settings:
    """How recordings are searched, traced and fitted.

    Parameters
    ----------
    station : Station
        The receiver; its ionosphere and mains frequency enter the numbers.
    channel : int or str
        Channel to measure, counted from 1, or ``"mean"`` for the average of all live channels.
    false_alarms_per_hour : float
        Detection threshold: false alarms expected in an hour, 0.01 to 1000.
    band_low_hz, band_high_hz : float
        Band searched, Hz.
    max_hops : int
        Highest number of field-line crossings tried, 1 to 8.
    density_exponent : float
        alpha of the density along the line, ``n ~ r**-alpha``, 0 to 6.
    density_exponent_sd : float
        One-sigma of alpha: how firmly fits hold it, counted in the profile sigma.
    fo_f2_sd_mhz, hm_f2_sd_km : float
        One-sigma of the F2 layer's critical frequency and peak height, where the station has none.
    stroke_distance_sd_m : float
        One-sigma distance of the stroke from the foot of the path, m.
    density_prior : str
        What breaks ties between hop orders: ``"saturated"``, the climatology of the full
        plasmasphere, or ``"none"``.
    density_prior_factor : float
        What the climatology is multiplied with, for example for season and solar cycle.
    density_prior_sd_dex : float
        One-sigma of that prior, in decades of density.
    fit_prior : str
        What enters every fit beside the trace: ``"none"``, or ``"climatology"``, the density of the
        full plasmasphere times `density_prior_factor`.
    fit_prior_sd_dex : float
        One-sigma of the density about it, in decades.
    l_range : tuple of float
        Lowest and highest L searched.
    options : tuple of (str, object)
        What a command was told beyond these: start time, ties of a fit.

    Raises
    ------
    UsageError
        When a value lies outside its range.

    Examples
    --------
    >>> Settings(max_hops=3).max_hops
    3
    """

    station: Station = field(default_factory=Station)
    channel: int | str = 1
    false_alarms_per_hour: float = 1.0
    band_low_hz: float = 500.0
    band_high_hz: float = 10_000.0
    max_hops: int = 5
    density_exponent: float = 1.0
    density_exponent_sd: float = 0.65
    fo_f2_sd_mhz: float = 1.5
    hm_f2_sd_km: float = 40.0
    stroke_distance_sd_m: float = 800e3
    density_prior: str = "saturated"
    density_prior_factor: float = 1.0
    density_prior_sd_dex: float = 0.25
    fit_prior: str = "none"
    fit_prior_sd_dex: float = 0.3
    l_range: tuple[float, float] = (1.6, 5.5)
    options: tuple[tuple[str, Any], ...] = ()

    def __post_init__(self) -> None:
        """Check every value against its allowed range."""
        for name, (low, high) in _RANGES.items():
            value = getattr(self, name)
            if not low <= value <= high:
                _refuse(name, value, f"is outside {low:g} to {high:g}")
        if not self.band_low_hz < self.band_high_hz:
            _refuse("band_low_hz", self.band_low_hz, f"is not below {self.band_high_hz=:g}")
        if not 1.2 <= self.l_range[0] < self.l_range[1] <= 8.0:
            _refuse("l_range", self.l_range, "is not an increasing pair within 1.2 to 8")
        if self.density_prior not in DENSITY_PRIORS:
            _refuse("density_prior", self.density_prior, f"is not one of {DENSITY_PRIORS}")
        if self.fit_prior not in FIT_PRIORS:
            _refuse("fit_prior", self.fit_prior, f"is not one of {FIT_PRIORS}")
        if self.channel != "mean" and not (isinstance(self.channel, int) and self.channel >= 1):
            _refuse("channel", self.channel, "is neither a number from 1 nor 'mean'")

    @property
    def critical_frequency_sd_hz(self) -> float:
        """One-sigma of the F2 layer's critical frequency, Hz: the station's, else the default."""
        known = self.station.fo_f2_sd_mhz
        return 1e6 * (self.fo_f2_sd_mhz if known is None else known)

    @property
    def peak_altitude_sd_m(self) -> float:
        """One-sigma of the F2 layer's peak altitude, m: the station's, else the default."""
        known = self.station.hm_f2_sd_km
        return 1e3 * (self.hm_f2_sd_km if known is None else known)

    def to_dict(self) -> dict[str, Any]:
        """Return all settings as plain values, ready for JSON."""
        plain: dict[str, Any] = {item.name: getattr(self, item.name) for item in fields(self)}
        plain["station"] = self.station.to_dict()
        plain["options"] = dict(self.options)
        return {
            name: list(value) if isinstance(value, tuple) else value
            for name, value in plain.items()
        }


_RANGES: dict[str, tuple[float, float]] = {
    "false_alarms_per_hour": (0.01, 1000.0),
    "band_low_hz": (100.0, 50_000.0),
    "band_high_hz": (500.0, 100_000.0),
    "max_hops": (1, 8),
    "density_exponent": (0.0, 6.0),
    "density_exponent_sd": (0.0, 3.0),
    "fo_f2_sd_mhz": (0.0, 10.0),
    "hm_f2_sd_km": (0.0, 200.0),
    "stroke_distance_sd_m": (0.0, 5e6),
    "density_prior_factor": (0.01, 100.0),
    "density_prior_sd_dex": (0.05, 5.0),
    "fit_prior_sd_dex": (0.01, 5.0),
}


def _refuse(name: str, value: object, why: str) -> None:
    reason = f"{name}={value} {why}"
    raise UsageError(Notice("E601", name, reason, "choose a value in that range"))
