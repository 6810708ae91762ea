"""Refractive and group index of the whistler (R) mode along the field in a cold plasma.

With f the wave frequency, fp and fH the plasma and gyrofrequency of the electrons, and for each
singly charged ion the mass ratio m = m_e/m_i, its share s of the ions and fc = m fH,

    n^2   = 1 + fp^2 b,   b = 1/(f (fH - f)) - sum s m / (f (f + fc))                  (1)
    n n_g = 1 + fp^2 a,   a = fH/(2 f (fH - f)^2) - sum s m fc / (2 f (f + fc)^2)      (2)

which is n^2 = 1 - sum wps^2/(w (w + Os)) with signed gyrofrequencies Os, and n_g = d(n f)/df
(Stix 1992, Waves in Plasmas, chapter 1: R, at propagation along the field).
"""

from __future__ import annotations

from functools import partial

import numpy as np
import numpy.typing as npt

from fieldlines.constants import ELECTRON_OXYGEN_MASS_RATIO, ELECTRON_PROTON_MASS_RATIO
from fieldlines.errors import DomainError, FloatArray, require_within

Terms = tuple[FloatArray, FloatArray]


def index_terms(
    frequency_hz: FloatArray, *, gyrofrequency_hz: FloatArray, oxygen_fraction: FloatArray | None
) -> Terms:
    """Return a and b of equations (2) and (1), Hz^-2, without checking the arguments.

    Parameters
    ----------
    frequency_hz, gyrofrequency_hz : ndarray
        Wave frequency and electron gyrofrequency, Hz, broadcasting, the first below the second.
    oxygen_fraction : ndarray or None
        O+ share of the ions, the rest H+; None leaves the ions out.

    Returns
    -------
    tuple of ndarray
        a (group) and b (phase), in the broadcast shape.
    """
    phase = 1.0 / (gyrofrequency_hz - frequency_hz)
    group = gyrofrequency_hz * phase
    group *= phase
    if oxygen_fraction is not None:
        for ratio, share in _ion_shares(oxygen_fraction):
            cyclotron_hz = ratio * gyrofrequency_hz
            inverse = 1.0 / (frequency_hz + cyclotron_hz)
            term = (share * ratio) * inverse
            phase -= term
            term *= inverse
            term *= cyclotron_hz
            group -= term
    per_frequency = 1.0 / frequency_hz
    phase *= per_frequency
    group *= 0.5 * per_frequency
    return group, phase


def index_term_changes(
    frequency_hz: FloatArray,
    *,
    gyrofrequency_hz: FloatArray,
    oxygen_fraction: FloatArray | None,
    gyrofrequency_change_hz: FloatArray,
    oxygen_fraction_change: FloatArray,
) -> Terms:
    """Return the first-order changes of a and b when the plasma changes, Hz^-2.

    Parameters
    ----------
    frequency_hz, gyrofrequency_hz, oxygen_fraction
        As for :func:`index_terms`.
    gyrofrequency_change_hz, oxygen_fraction_change : ndarray
        Changes of the gyrofrequency (Hz) and of the O+ share, broadcasting.

    Returns
    -------
    tuple of ndarray
        Changes of a and b, in the broadcast shape: the differentials of equations (2) and (1).
    """
    inverse = 1.0 / (gyrofrequency_hz - frequency_hz)
    phase = inverse * inverse
    phase *= -gyrofrequency_change_hz
    group = phase * inverse
    group *= gyrofrequency_hz + frequency_hz
    if oxygen_fraction is not None:
        ions = _ion_shares(oxygen_fraction)
        share_changes = (oxygen_fraction_change, -oxygen_fraction_change)
        for (ratio, share), share_change in zip(ions, share_changes, strict=True):
            cyclotron_hz = ratio * gyrofrequency_hz
            inverse = 1.0 / (frequency_hz + cyclotron_hz)
            # d/d(fc) of s m / (f + fc), and of s m fc / (f + fc)^2.
            by_field = inverse * inverse
            by_field *= share * ratio**2 * gyrofrequency_change_hz
            by_share = (ratio * share_change) * inverse
            phase += by_field
            phase -= by_share
            by_field *= inverse
            by_field *= frequency_hz - cyclotron_hz
            by_share *= inverse
            by_share *= cyclotron_hz
            group -= by_field
            group -= by_share
    per_frequency = 1.0 / frequency_hz
    phase *= per_frequency
    group *= 0.5 * per_frequency
    return group, phase


def _ion_shares(oxygen_fraction: FloatArray) -> tuple[tuple[float, FloatArray], ...]:
    """Mass ratio m and share s of O+ and of H+."""
    return (
        (ELECTRON_OXYGEN_MASS_RATIO, oxygen_fraction),
        (ELECTRON_PROTON_MASS_RATIO, 1.0 - oxygen_fraction),
    )


def refractive_index(
    frequency_hz: npt.ArrayLike,
    *,
    plasma_frequency_hz: npt.ArrayLike,
    gyrofrequency_hz: npt.ArrayLike,
    oxygen_fraction: npt.ArrayLike | None = None,
) -> FloatArray:
    r"""Return the R-mode refractive index along the field.

    Parameters
    ----------
    frequency_hz : array_like
        Wave frequency, Hz, above 0 and below the gyrofrequency.
    plasma_frequency_hz : array_like
        Electron plasma frequency, Hz, 0 or more.
    gyrofrequency_hz : array_like
        Electron gyrofrequency, Hz.
    oxygen_fraction : array_like, optional
        O+ share of the ions, 0 to 1, the rest H+. None (default): electrons only.

    Returns
    -------
    ndarray
        Phase refractive index, in the broadcast shape of the arguments.

    Raises
    ------
    DomainError
        If an argument is outside its range.

    Notes
    -----
    .. math:: n^2 = 1 - \sum_s \frac{\omega_{ps}^2}{\omega(\omega + \Omega_s)}

    with signed gyrofrequencies. Stix (1992), Waves in Plasmas, chapter 1. Cold, collisionless.

    Examples
    --------
    >>> n = refractive_index(5000.0, plasma_frequency_hz=401.54e3, gyrofrequency_hz=109.17e3)
    >>> f"{n:.3f}"
    '17.623'
    """
    f, fp, fh, oxygen = _checked(
        frequency_hz, plasma_frequency_hz, gyrofrequency_hz, oxygen_fraction
    )
    _, phase = index_terms(f, gyrofrequency_hz=fh, oxygen_fraction=oxygen)
    return np.asarray(np.sqrt(1.0 + fp**2 * phase))


def group_index(
    frequency_hz: npt.ArrayLike,
    *,
    plasma_frequency_hz: npt.ArrayLike,
    gyrofrequency_hz: npt.ArrayLike,
    oxygen_fraction: npt.ArrayLike | None = None,
) -> FloatArray:
    r"""Return the R-mode group refractive index along the field.

    Parameters
    ----------
    frequency_hz : array_like
        Wave frequency, Hz, above 0 and below the gyrofrequency.
    plasma_frequency_hz : array_like
        Electron plasma frequency, Hz, 0 or more.
    gyrofrequency_hz : array_like
        Electron gyrofrequency, Hz.
    oxygen_fraction : array_like, optional
        O+ share of the ions, 0 to 1, the rest H+. None (default): electrons only.

    Returns
    -------
    ndarray
        Group refractive index c/v_g, in the broadcast shape of the arguments.

    Raises
    ------
    DomainError
        If an argument is outside its range.

    Notes
    -----
    .. math:: n_g = \frac{d(nf)}{df}
              = \frac1n\left[1 - \sum_s \frac{f_{ps}^2 F_s}{2 f (f + F_s)^2}\right]

    with signed gyrofrequencies F; differentiated from Stix (1992), Waves in Plasmas, chapter 1.

    Examples
    --------
    >>> n = group_index(5000.0, plasma_frequency_hz=401.54e3, gyrofrequency_hz=109.17e3)
    >>> f"{n:.3f}"
    '9.261'
    """
    f, fp, fh, oxygen = _checked(
        frequency_hz, plasma_frequency_hz, gyrofrequency_hz, oxygen_fraction
    )
    group, phase = index_terms(f, gyrofrequency_hz=fh, oxygen_fraction=oxygen)
    return np.asarray((1.0 + fp**2 * group) / np.sqrt(1.0 + fp**2 * phase))


def quasi_longitudinal_refractive_index(
    frequency_hz: npt.ArrayLike,
    *,
    plasma_frequency_hz: npt.ArrayLike,
    gyrofrequency_hz: npt.ArrayLike,
) -> FloatArray:
    r"""Return the refractive index in the quasi-longitudinal approximation.

    Parameters
    ----------
    frequency_hz : array_like
        Wave frequency, Hz, above 0 and below the gyrofrequency.
    plasma_frequency_hz : array_like
        Electron plasma frequency, Hz, 0 or more.
    gyrofrequency_hz : array_like
        Electron gyrofrequency, Hz.

    Returns
    -------
    ndarray
        Phase refractive index, in the broadcast shape of the arguments.

    Raises
    ------
    DomainError
        If an argument is outside its range.

    Notes
    -----
    .. math:: n = f_p / \sqrt{f (f_H - f)}

    Electrons only, with 1 neglected against n squared (Helliwell 1965, from memory).

    Examples
    --------
    >>> n = quasi_longitudinal_refractive_index(
    ...     25e3, plasma_frequency_hz=400e3, gyrofrequency_hz=50e3
    ... )
    >>> f"{n:.0f}"
    '16'
    """
    f, fp, fh, _ = _checked(frequency_hz, plasma_frequency_hz, gyrofrequency_hz, None)
    return np.asarray(fp / np.sqrt(f * (fh - f)))


def quasi_longitudinal_group_index(
    frequency_hz: npt.ArrayLike,
    *,
    plasma_frequency_hz: npt.ArrayLike,
    gyrofrequency_hz: npt.ArrayLike,
) -> FloatArray:
    r"""Return the group index in the quasi-longitudinal approximation.

    Parameters
    ----------
    frequency_hz : array_like
        Wave frequency, Hz, above 0 and below the gyrofrequency.
    plasma_frequency_hz : array_like
        Electron plasma frequency, Hz, 0 or more.
    gyrofrequency_hz : array_like
        Electron gyrofrequency, Hz.

    Returns
    -------
    ndarray
        Group refractive index, in the broadcast shape of the arguments.

    Raises
    ------
    DomainError
        If an argument is outside its range.

    Notes
    -----
    .. math:: n_g = \frac{f_p f_H}{2 f^{1/2} (f_H - f)^{3/2}}

    Smallest at a quarter of the gyrofrequency (Helliwell 1965, from memory).

    Examples
    --------
    >>> n = quasi_longitudinal_group_index(
    ...     25e3, plasma_frequency_hz=400e3, gyrofrequency_hz=50e3
    ... )
    >>> f"{n:.0f}"
    '16'
    """
    f, fp, fh, _ = _checked(frequency_hz, plasma_frequency_hz, gyrofrequency_hz, None)
    return np.asarray(fp * fh / (2.0 * np.sqrt(f) * (fh - f) ** 1.5))


def _checked(
    frequency_hz: npt.ArrayLike,
    plasma_frequency_hz: npt.ArrayLike,
    gyrofrequency_hz: npt.ArrayLike,
    oxygen_fraction: npt.ArrayLike | None,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray | None]:
    """Return the arguments as arrays after checking their ranges."""
    advice = "drop this value, or correct it"
    check = partial(require_within, low=0.0, high=np.inf, unit="Hz", next_step=advice)
    f = check("frequency_hz", frequency_hz, open_low=True)
    fp = check("plasma_frequency_hz", plasma_frequency_hz)
    fh = check("gyrofrequency_hz", gyrofrequency_hz, open_low=True)
    if not np.all(f < fh):
        pair = np.broadcast_arrays(f, fh)
        worst = int(np.argmax(f - fh))
        raise DomainError(
            "frequency_hz",
            float(pair[0].flat[worst]),
            allowed=f"below the gyrofrequency {pair[1].flat[worst]:.8g} Hz",
            next_step="drop this frequency or lower the band limit",
        )
    if oxygen_fraction is None:
        return f, fp, fh, None
    return f, fp, fh, check("oxygen_fraction", oxygen_fraction, high=1.0, unit="")
