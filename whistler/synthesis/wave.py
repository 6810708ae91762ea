"""The waveform of one hop of a whistler, by Fourier synthesis of its phase."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.interpolate import CubicSpline

from fieldlines.errors import FloatArray
from fieldlines.line import FieldLineModel
from whistler.synthesis.parts import refuse
from whistler.synthesis.phase import PathPhase, path_phase
from whistler.synthesis.response import ComplexArray
from whistler.synthesis.sferics import Band
from whistler.synthesis.strokes import Path

#: Upper band limit when a path gives none, Hz, unless half the gyrofrequency is lower.
HIGHEST_USUAL_HZ = 9500.0
#: The band must end below this share of the equatorial gyrofrequency.
HIGHEST_GYRO_SHARE = 0.9
#: Half widths of the cosine band edges over the band limits (low, high).
EDGE_SHARE = (0.12, 0.06)
#: Sub-paths of a duct.
SUBPATH_COUNT = 32


@dataclass(frozen=True)
class HopWave:
    """One hop of one path as samples.

    Parameters
    ----------
    first_frame : int
        Position of the first sample in the recording; may be negative.
    samples : ndarray, shape (n,)
        Amplitude, unit spectral density before scaling.
    """

    first_frame: int
    samples: FloatArray


@dataclass(frozen=True)
class Ray:
    """A path ready to be rendered: its phase and its band.

    Parameters
    ----------
    path : Path
        The description.
    phase : PathPhase
        Cycles of phase on one crossing.
    low_hz, high_hz : float
        Band limits (half amplitude).
    equatorial_gyrofrequency_hz : float
        Of the path.
    """

    path: Path
    phase: PathPhase
    low_hz: float
    high_hz: float
    equatorial_gyrofrequency_hz: float

    @property
    def edges_hz(self) -> tuple[float, float]:
        """Frequencies between which the spectrum is not zero."""
        return self.low_hz * (1.0 - EDGE_SHARE[0]), self.high_hz * (1.0 + EDGE_SHARE[1])


def prepare_ray(path: Path, *, model: FieldLineModel) -> Ray:
    """Return a path with its phase integral done.

    Parameters
    ----------
    path : Path
        The duct.
    model : FieldLineModel
        What it runs through.

    Returns
    -------
    Ray
        Phase over the band and band limits.

    Raises
    ------
    UsageError
        When the band is empty or ends above nine tenths of the equatorial gyrofrequency.
    """
    gyro_hz = model.dipole.equatorial_gyrofrequency(path.l_value)
    high_hz = path.frequency_high_hz or min(HIGHEST_USUAL_HZ, 0.5 * gyro_hz)
    require_band(path, high_hz=high_hz, limit_hz=HIGHEST_GYRO_SHARE * gyro_hz)
    phase = path_phase(
        path.l_value,
        equatorial_density_m3=path.equatorial_density_cm3 * 1e6,
        model=model,
        low_hz=path.frequency_low_hz * (1.0 - EDGE_SHARE[0]),
        high_hz=high_hz * (1.0 + EDGE_SHARE[1]),
    )
    return Ray(path, phase, path.frequency_low_hz, high_hz, gyro_hz)


def require_band(path: Path, *, high_hz: float, limit_hz: float) -> None:
    """Refuse a band that is empty or reaches beyond a limit.

    Parameters
    ----------
    path : Path
        The path, for its lower limit and the message.
    high_hz, limit_hz : float
        Upper band limit, and the highest frequency the path or the recording carries, Hz.

    Raises
    ------
    UsageError
        Naming the band and the limit.
    """
    if not path.frequency_low_hz < high_hz * (1.0 + EDGE_SHARE[1]) < limit_hz:
        raise refuse(
            path,
            "frequency_high_hz",
            why=f"makes the band {path.frequency_low_hz:.0f} to {high_hz:.0f} Hz, but nothing "
            f"above {limit_hz:.0f} Hz is carried",
            next_step="lower the band limits or raise the sampling rate",
        )


def hop_wave(
    ray: Ray, generator: np.random.Generator, *, hops: int, lightning_time_s: float, band: Band
) -> HopWave:
    r"""Return the waveform after a number of crossings.

    Parameters
    ----------
    ray : Ray
        The path.
    generator : numpy.random.Generator
        Source of the fading and of the sub-paths.
    hops : int
        Crossings of the field line.
    lightning_time_s : float
        When the wave entered the path, s from the first sample of the recording.
    band : Band
        For the sampling rate.

    Returns
    -------
    HopWave
        Samples and where they go.

    Notes
    -----
    .. math:: s(t) = \mathrm{Re} \int A(f) M(f) e^{2\pi i f (t - t_l) - i h \varphi(f)} df

    with A the band edges and tilt, M fading and sub-paths. The transform is longer than the whole
    trace, so that nothing wraps round.
    """
    low_hz, high_hz = ray.edges_hz
    probe = np.linspace(low_hz, high_hz, 2000)
    delays = hops * ray.phase.group_delay(probe)
    guard_s = 0.1 + 6.0 * hops * ray.path.spread_s * float(delays.max() / delays.min())
    start_s = lightning_time_s + float(delays.min()) - guard_s
    first = int(np.floor(start_s * band.sample_rate_hz))
    length_s = float(np.ptp(delays)) + 2.0 * guard_s
    length = fft.next_fast_len(int(length_s * band.sample_rate_hz), real=True)
    step_hz = band.sample_rate_hz / length
    bins = np.arange(int(np.ceil(low_hz / step_hz)), int(high_hz / step_hz) + 1)
    bins = bins[bins < length // 2]
    frequency = bins * step_hz
    delay_s = lightning_time_s - first / band.sample_rate_hz
    cycles = hops * ray.phase.cycles(frequency) + frequency * delay_s
    spectrum = np.zeros(length // 2 + 1, dtype=complex)
    spectrum[bins] = (
        amplitude(ray, frequency)
        * modulation(ray, frequency, generator=generator, hops=hops)
        * np.exp(-2j * np.pi * (cycles % 1.0))
    )
    return HopWave(first, fft.irfft(spectrum, length) * band.sample_rate_hz)


def amplitude(ray: Ray, frequency_hz: FloatArray) -> FloatArray:
    """Return the smooth amplitude spectrum of a path: cosine edges and tilt.

    Parameters
    ----------
    ray : Ray
        The path.
    frequency_hz : ndarray, shape (n,)
        Frequencies, Hz.

    Returns
    -------
    ndarray, shape (n,)
        1 in mid-band (without tilt), 0.5 at the band limits.
    """
    rise = (frequency_hz / ray.low_hz - 1.0) / (2.0 * EDGE_SHARE[0]) + 0.5
    fall = (1.0 - frequency_hz / ray.high_hz) / (2.0 * EDGE_SHARE[1]) + 0.5
    edges = np.sin(0.5 * np.pi * np.clip(rise, 0, 1)) * np.sin(0.5 * np.pi * np.clip(fall, 0, 1))
    octaves = np.log2(frequency_hz / np.sqrt(ray.low_hz * ray.high_hz))
    return np.asarray(edges**2 * 10.0 ** (ray.path.tilt_db_per_octave * octaves / 20.0))


def modulation(
    ray: Ray, frequency_hz: FloatArray, *, generator: np.random.Generator, hops: int
) -> ComplexArray:
    r"""Return the complex factor of fading and of a duct with many sub-paths.

    Parameters
    ----------
    ray : Ray
        The path.
    frequency_hz : ndarray, shape (n,)
        Increasing frequencies, Hz.
    generator : numpy.random.Generator
        Source of the draws.
    hops : int
        Crossings; sub-path delays grow with it.

    Returns
    -------
    ndarray, shape (n,)
        Factor with unit mean square.

    Notes
    -----
    Sub-path k of a duct has a slightly different density, hence (where n is large) a phase
    :math:`(1 + \epsilon_k)\varphi(f)`: with :math:`\epsilon_k` normal, of mean zero, and scaled so
    that the delays scatter by `spread_s` r.m.s. in mid-band; the trace is centred on the duct's
    own delay and thicker where it is later.
    """
    middle_hz = np.array([np.sqrt(ray.low_hz * ray.high_hz)])
    share = ray.path.spread_s / float(ray.phase.group_delay(middle_hz)[0])
    widest_s = 4.0 * share * hops * float(np.max(ray.phase.group_delay(np.asarray(ray.edges_hz))))
    span_hz = float(frequency_hz[-1] - frequency_hz[0])
    step_hz = 1.0 / (20.0 * (widest_s + 2.0 / ray.path.fading_scale_hz))
    grid = np.linspace(frequency_hz[0], frequency_hz[-1], max(50, int(span_hz / step_hz)))
    factor = _subpaths(hops * share * ray.phase.cycles(grid), generator)
    factor *= _fading(ray.path, grid, generator)
    factor /= np.sqrt(np.mean(np.abs(factor) ** 2))
    return np.asarray(CubicSpline(grid, factor)(frequency_hz))


def _subpaths(cycles: FloatArray, generator: np.random.Generator) -> ComplexArray:
    """Sum of sub-paths whose phases differ by normal multiples of the given cycles."""
    epsilon = generator.standard_normal(SUBPATH_COUNT)
    epsilon = (epsilon - epsilon.mean()) / epsilon.std()
    offset = generator.random(SUBPATH_COUNT)
    middle = cycles - cycles[cycles.size // 2]
    total = np.zeros(cycles.size, dtype=complex)
    for one, start in zip(epsilon, offset, strict=True):
        total += np.exp(-2j * np.pi * (one * middle + start))
    return total


def _fading(path: Path, grid: FloatArray, generator: np.random.Generator) -> ComplexArray:
    """1 plus a smooth complex normal process along frequency."""
    knots = int(np.ptp(grid) / path.fading_scale_hz) + 4
    values = generator.standard_normal((2, knots)) / np.sqrt(2.0)
    positions = np.linspace(grid[0], grid[-1], knots)
    smooth = CubicSpline(positions, values[0] + 1j * values[1])(grid)
    return np.asarray(1.0 + path.fading_depth * smooth)
