"""The frozen parts a synthetic whistler is described by: the medium, its paths, the stroke."""

from __future__ import annotations

from dataclasses import dataclass

from fieldlines.density import ChapmanLayer, IonMixture
from fieldlines.dipole import CentredDipole
from fieldlines.line import FieldLineModel
from whistler.synthesis.parts import check_ranges, refuse


@dataclass(frozen=True)
class Medium:
    """What the whistlers travel through: date of the dipole, density exponent, F2 layer.

    Parameters
    ----------
    decimal_year : float
        Date of the geomagnetic dipole.
    density_exponent : float
        alpha of the density along the line.
    fo_f2_mhz, hm_f2_km, scale_height_km : float
        The layer at each end; fo_f2_mhz = 0 leaves it out.
    ions : bool
        Whether H+ and O+ take part.
    """

    decimal_year: float = 2025.0
    density_exponent: float = 1.0
    fo_f2_mhz: float = 5.0
    hm_f2_km: float = 300.0
    scale_height_km: float = 60.0
    ions: bool = True

    def __post_init__(self) -> None:
        """Check the ranges."""
        check_ranges(
            self, decimal_year=(1900, 2030), density_exponent=(0, 6), fo_f2_mhz=(0, 30),
            hm_f2_km=(150, 700), scale_height_km=(10, 200),
        )  # fmt: skip

    def field_line_model(self) -> FieldLineModel:
        """Return the same medium as the physics package takes it."""
        layer = None
        if self.fo_f2_mhz > 0.0:
            layer = ChapmanLayer(
                critical_frequency_hz=self.fo_f2_mhz * 1e6,
                peak_altitude_m=self.hm_f2_km * 1e3,
                scale_height_m=self.scale_height_km * 1e3,
            )
        return FieldLineModel(
            CentredDipole.from_date(self.decimal_year),
            density_exponent=self.density_exponent,
            layer=layer,
            ions=IonMixture() if self.ions else None,
        )


@dataclass(frozen=True)
class Path:
    """One duct lit by a stroke, and what is heard of it.

    Parameters
    ----------
    l_value : float
        L of the duct, 1.3 to 7.
    equatorial_density_cm3 : float
        Electron density at its equator, cm^-3.
    snr_db : float
        Strength of the first hop in `hops`; `whistler.synthesis.level` defines it.
    hops : tuple of int
        Field-line crossings heard, for example ``(1, 3, 5)``.
    hop_loss_db : float
        Strength lost with each further crossing, dB.
    frequency_low_hz, frequency_high_hz : float, float or None
        Band limits (where the amplitude is half); None is the smaller of 9.5 kHz and half the
        equatorial gyrofrequency.
    tilt_db_per_octave : float
        Slope of the spectrum before the limits.
    spread_s : float
        R.m.s. spread of the delay over the duct's sub-paths, for one hop, s.
    fading_depth : float
        R.m.s. of the complex modulation along frequency, 0 to 1.
    fading_scale_hz : float
        Frequency over which it changes.
    """

    l_value: float
    equatorial_density_cm3: float
    snr_db: float = 15.0
    hops: tuple[int, ...] = (1,)
    hop_loss_db: float = 2.0
    frequency_low_hz: float = 1000.0
    frequency_high_hz: float | None = None
    tilt_db_per_octave: float = 0.0
    spread_s: float = 0.001
    fading_depth: float = 0.3
    fading_scale_hz: float = 700.0

    def __post_init__(self) -> None:
        """Check the ranges and that all hops end in the same hemisphere."""
        check_ranges(
            self, l_value=(1.3, 7.0), equatorial_density_cm3=(1.0, 1e5), snr_db=(-40, 80),
            hop_loss_db=(0, 40), frequency_low_hz=(300, 20e3), frequency_high_hz=(400, 40e3),
            tilt_db_per_octave=(-20, 20), spread_s=(0, 0.2), fading_depth=(0, 1),
            fading_scale_hz=(50, 1e4),
        )  # fmt: skip
        if not self.hops or min(self.hops) < 1 or len({hop % 2 for hop in self.hops}) != 1:
            raise refuse(
                self, "hops", why="must be whole numbers from 1, all odd or all even",
                next_step="odd hops end in the other hemisphere: give even ones their own stroke",
            )  # fmt: skip
        if self.frequency_high_hz and self.frequency_high_hz <= self.frequency_low_hz:
            raise refuse(
                self,
                "frequency_high_hz",
                why="is not above frequency_low_hz",
                next_step="swap them",
            )


@dataclass(frozen=True)
class Stroke:
    """A lightning stroke with the paths it lights.

    Parameters
    ----------
    lightning_time_s : float
        Time of the stroke from the first sample, s; its wave enters the ducts then.
    paths : tuple of Path
        The ducts; all hops of one stroke must be odd, or all even.
    sferic_strength : float
        Peak of its sferic over the median of the first sferic population (over the noise unit when
        there is none); 0 hides it.
    distance_offset_m : float
        How much farther from the receiver the stroke lies than nominal: than the conjugate foot
        (odd hops) or than 150 km (even hops).
    """

    lightning_time_s: float
    paths: tuple[Path, ...]
    sferic_strength: float = 2.0
    distance_offset_m: float = 0.0

    def __post_init__(self) -> None:
        """Check the ranges and the parity."""
        check_ranges(
            self, lightning_time_s=(0, 1e5), sferic_strength=(0, 1e3), distance_offset_m=(-2e7, 2e7)
        )
        if len({hop % 2 for path in self.paths for hop in path.hops}) != 1:
            raise refuse(
                self, "paths", why="must be a list with only odd, or only even, hops",
                next_step="give at least one path, and split odd and even hops over two strokes",
            )  # fmt: skip
