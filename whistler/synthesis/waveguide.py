"""Sferics: what the Earth-ionosphere waveguide makes of a lightning stroke.

The guide is a flat one with a sharp upper wall at a height h. Its modes have cutoffs m c / (2 h);
above cutoff mode m runs with the phase velocity c / sqrt(1 - (fc / f)^2). Mode 0 (TEM) has none and
carries what is heard below 1 kHz. Attenuation rates are round figures of the right size (from
memory of the VLF literature, by night): they make the band of 1 to 3.5 kHz nearly empty.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from fieldlines.constants import SPEED_OF_LIGHT_M_S
from fieldlines.errors import FloatArray

ComplexArray = npt.NDArray[np.complex128]

#: One decibel as an exponent of amplitude.
NEPER_PER_DB = np.log(10.0) / 20.0
#: TEM mode: exp(-d K (i f / 1 kHz)^p) is causal for p below 1; 10 dB/Mm at 1 kHz, 1.8 at 100 Hz.
TEM_EXPONENT = 0.75
TEM_LOSS = 10.0 * NEPER_PER_DB / np.cos(0.5 * np.pi * TEM_EXPONENT)
#: Decay of the amplitude of a wave that bounces up and down at the first cutoff, 1/s (0.5 dB/ms).
DAMPING_PER_S = 60.0
#: Time kept before the wave front, s, for the ringing of the band limits.
LEAD_S = 0.002
#: Length of a pulse, s: tweek tails have died away by then.
PULSE_S = 0.12


@dataclass(frozen=True)
class Guide:
    """The waveguide between the Earth and the ionosphere.

    Parameters
    ----------
    height_m : float
        Height of its upper wall.
    tweek_db : float
        Excitation of the slightly damped modes (QTE) over the strongly damped ones (QTM), dB.
    """

    height_m: float = 86e3
    tweek_db: float = -22.0


@dataclass(frozen=True)
class Discharge:
    """The current of a return stroke: two exponentials and a slow tail.

    Parameters
    ----------
    rise_s, fall_s : float
        Time constants of the current, s.
    tail : float
        Charge moment of the continuing current over the stroke's.
    """

    rise_s: float = 8e-6
    fall_s: float = 90e-6
    tail: float = 0.3


def cutoff_frequency(height_m: float, *, mode: int = 1) -> float:
    """Return the cutoff of a mode of the flat guide, Hz: m c / (2 h).

    Parameters
    ----------
    height_m : float
        Height of the guide, m.
    mode : int
        Order, from 1.

    Returns
    -------
    float
        Frequency below which the mode does not travel, Hz.

    Examples
    --------
    >>> f"{cutoff_frequency(85e3):.1f} Hz"
    '1763.5 Hz'
    """
    return mode * SPEED_OF_LIGHT_M_S / (2.0 * height_m)


def sferic_spectrum(
    frequency_hz: FloatArray, *, distance_m: float, guide: Guide, discharge: Discharge
) -> ComplexArray:
    r"""Return the spectrum of a sferic, in time counted from distance / c after the stroke.

    Parameters
    ----------
    frequency_hz : ndarray, shape (n,)
        Frequencies, Hz, from 0.
    distance_m : float
        Distance along the ground, m.
    guide : Guide
        The waveguide.
    discharge : Discharge
        The stroke.

    Returns
    -------
    ndarray, shape (n,)
        Vertical electric field, arbitrary unit; positive phase is early (numpy's convention).

    Notes
    -----
    With :math:`S_m = \sqrt{1 - (f_m/f)^2}` (negative imaginary below cutoff; the damping is a small
    positive imaginary part of f_m)

    .. math:: E(f) = \sqrt{i f}\, I(f) \sum_m S_m^{3/2}
              e^{-2\pi i f (d/c) (S_m - 1)}\, 10^{-\alpha_m d / 20}

    the far field of a vertical current (Wait 1970, Electromagnetic Waves in Stratified Media, mode
    sums; from memory). The group delay of a mode is :math:`(d/c)/S_m`.
    """
    frequency = np.maximum(frequency_hz, 1.0)
    distance_mm = distance_m * 1e-6
    total = np.exp(-distance_mm * TEM_LOSS * (1j * frequency / 1000.0) ** TEM_EXPONENT)
    tweek = 10.0 ** (guide.tweek_db / 20.0)
    for mode in range(1, _mode_count(guide, float(frequency[-1])) + 1):
        cutoff = mode * (cutoff_frequency(guide.height_m) + 1j * DAMPING_PER_S / (2.0 * np.pi))
        velocity = np.conj(np.sqrt(np.conj(1.0 - (cutoff / frequency) ** 2)))
        cycles = frequency * distance_m / SPEED_OF_LIGHT_M_S * (velocity - 1.0)
        loss_db = (2.0 + 5.0 * (4000.0 * mode / frequency) ** 3) / np.abs(velocity) * distance_mm
        magnetic = velocity**1.5 * np.exp(-NEPER_PER_DB * loss_db)
        electric = tweek * velocity**0.5 * np.exp(-NEPER_PER_DB * distance_mm)
        total += np.exp(-2j * np.pi * cycles) * (magnetic + electric)
    source = np.sqrt(1j * frequency) * _current(frequency, discharge)
    return np.asarray(source * total / np.sqrt(distance_mm))


def _mode_count(guide: Guide, highest_hz: float) -> int:
    """Modes above cutoff at the highest frequency; beyond ten they add nothing but time."""
    return min(10, int(highest_hz / cutoff_frequency(guide.height_m)))


def _current(frequency_hz: FloatArray, discharge: Discharge) -> ComplexArray:
    omega = 2j * np.pi * frequency_hz
    stroke = 1.0 / ((1.0 + omega * discharge.rise_s) * (1.0 + omega * discharge.fall_s))
    return np.asarray(stroke + discharge.tail / (1.0 + omega * 2e-3))
