"""What the model leaves open, as further unknowns of a fit with declared spreads.

Where the nose is in the band, a trace says itself how the density runs along the line; below it,
nothing does. Fitting the density exponent and the F2 layer together with L and density, each held
near its default by its declared one-sigma, covers both.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from fieldlines import FieldLineModel, TravelTime
from fieldlines.errors import FloatArray
from whistler.settings import Settings

EXPONENT, LAYER = 0, 1  # places among the unknowns, each in sigmas of its spread
COUNT = 2
EXPONENT_LIMITS = (0.0, 6.0)
HEIGHT_HZ_M = 1.3  # of critical frequency that delay as much as a metre of height, L 2.2 to 4
LEAST_SHARE = 0.3  # of the layer's critical frequency that is left


@dataclass(frozen=True)
class ModelScatter:
    """Declared one-sigmas of what the model takes for granted.

    Parameters
    ----------
    density_exponent : float
        Of the density along the line.
    critical_frequency_hz : float
        Of the F2 layer, with what its height adds.
    """

    density_exponent: float
    critical_frequency_hz: float

    def moved(self, model: FieldLineModel, sigmas: FloatArray) -> FieldLineModel:
        """Return the model so many sigmas away from its default."""
        layer = model.layer
        if layer is not None:
            critical_hz = layer.critical_frequency_hz + sigmas[LAYER] * self.critical_frequency_hz
            layer = replace(layer, critical_frequency_hz=float(critical_hz))
        exponent = model.density_exponent + float(sigmas[EXPONENT]) * self.density_exponent
        return replace(model, density_exponent=exponent, layer=layer)

    def limits(self, model: FieldLineModel) -> tuple[FloatArray, FloatArray]:
        """Return the lowest and highest value of each unknown, in sigmas, shape (2,) each."""
        low, high = np.full(COUNT, -8.0), np.full(COUNT, 8.0)
        if self.density_exponent > 0.0:
            ends = np.array(EXPONENT_LIMITS) - model.density_exponent
            low[EXPONENT], high[EXPONENT] = ends / self.density_exponent
        if model.layer is not None and self.critical_frequency_hz > 0.0:
            default_hz = model.layer.critical_frequency_hz
            low[LAYER] = (LEAST_SHARE - 1.0) * default_hz / self.critical_frequency_hz
        # The default itself lies inside, also where it is a limit.
        return np.minimum(low, -1e-3), np.maximum(high, 1e-3)

    def delay_changes_s(self, delay: TravelTime, model: FieldLineModel) -> FloatArray:
        """Return by how much one sigma of each lengthens the travel times, shape (n, 2)."""
        by_layer = np.zeros_like(delay.time_s)
        if model.layer is not None:
            share = self.critical_frequency_hz / model.layer.critical_frequency_hz
            by_layer = share * delay.layer_change_s
        return np.stack([self.density_exponent * delay.jacobian[:, 2], by_layer], axis=1)


def declared_scatter(settings: Settings) -> ModelScatter:
    """Return the one-sigmas that the settings declare.

    Parameters
    ----------
    settings : Settings
        Density exponent and F2 layer.

    Examples
    --------
    >>> declared_scatter(Settings()).density_exponent
    0.65
    """
    return ModelScatter(
        settings.density_exponent_sd,
        float(
            np.hypot(settings.critical_frequency_sd_hz, HEIGHT_HZ_M * settings.peak_altitude_sd_m)
        ),
    )
