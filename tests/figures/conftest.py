"""Hand-made measurements: every number in them is known, nothing has to be measured."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from fieldlines import FieldLineModel, maximum_frequency, nose, travel_time
from whistler.measure import Measurement
from whistler.model import field_line_model
from whistler.recording import Recording
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.sferic import SfericCatalogue
from whistler.spectrogram import Spectrogram
from whistler.trace import Trace

RATE_HZ = 24_000

MakeRow = Callable[..., WhistlerRow]
MakeMeasurement = Callable[..., Measurement]


@pytest.fixture(scope="session")
def model() -> FieldLineModel:
    return field_line_model(Settings(), decimal_year=2025.0)


@pytest.fixture(scope="session")
def make_row(model: FieldLineModel) -> MakeRow:
    """A row whose trace lies on its model, but for the residuals asked for."""

    def make(
        group: int = 1,
        *,
        l_value: float = 2.8,
        density_cm3: float = 1000.0,
        hops: int = 1,
        lightning_time_s: float = 2.0,
        frequency_hz: Any = (2000.0, 3000.0, 4000.0, 5000.0, 6000.0),
        residual_s: float = 0.0,
        sd_s: float = 0.0004,
        **changes: Any,
    ) -> WhistlerRow:
        frequency_hz = np.asarray(frequency_hz, float)
        path = {"l_value": l_value, "equatorial_density_m3": density_cm3 * 1e6, "model": model}
        tip = nose(l_value, equatorial_density_m3=density_cm3 * 1e6, model=model)
        time_s = lightning_time_s + hops * travel_time(frequency_hz, **path) + residual_s
        row = WhistlerRow(
            recording="night.wav",
            group=group,
            sferic_time_s=lightning_time_s + 0.04,
            sferic_time_sd_s=0.0005,
            sferic_seen=True,
            lightning_time_s=lightning_time_s,
            hops=hops,
            l_value=l_value,
            l_value_sd=0.004,
            l_value_profile_sd=0.04,
            equatorial_density_cm3=density_cm3,
            equatorial_density_sd_cm3=12.0,
            equatorial_density_profile_sd_cm3=230.0,
            nose_frequency_hz=tip.frequency_hz,
            nose_time_s=tip.time_s,
            equatorial_gyrofrequency_hz=maximum_frequency(l_value, model=model),
            frequency_low_hz=float(frequency_hz.min()),
            frequency_high_hz=float(frequency_hz.max()),
            snr_db=15.0,
            uncertainty_status="ok",
            trace=Trace(frequency_hz, time_s, np.full(len(frequency_hz), sd_s)),
        )
        return replace(row, **changes)

    return make


@pytest.fixture(scope="session")
def make_view() -> Callable[..., Spectrogram]:
    """Noise of unit mean, as the normalised spectrogram has it."""

    def make(duration_s: float = 12.0, *, start_s: float = 0.0) -> Spectrogram:
        generator = np.random.default_rng(5)
        frequency_hz = np.arange(500.0, 10_000.0, 100.0)
        power = generator.exponential(size=(len(frequency_hz), round(duration_s / 0.004)))
        return Spectrogram(power.astype(np.float32), frequency_hz, start_s + 0.01, 0.004, 0.02)

    return make


@pytest.fixture(scope="session")
def make_measurement(
    model: FieldLineModel, make_view: Callable[..., Spectrogram]
) -> MakeMeasurement:
    def make(
        *rows: WhistlerRow,
        duration_s: float = 12.0,
        path: str = "night_20250314T020000Z.wav",
        settings: Settings | None = None,
        with_views: bool = True,
    ) -> Measurement:
        recording = Recording(
            path=path,
            sample_rate_hz=RATE_HZ,
            frame_count=round(duration_s * RATE_HZ),
            channels=1,
            channel=1,
            start_time=datetime(2025, 3, 14, 2, tzinfo=UTC),
            start_time_source="file name",
        )
        return Measurement(
            recording=recording,
            settings=settings or Settings(),
            rows=rows,
            notices=(),
            views=(make_view(duration_s),) if with_views else (),
            sferics=SfericCatalogue(np.zeros(0), np.zeros(0), duration_s),
            model=model,
        )

    return make


@pytest.fixture
def ax() -> Axes:
    return Figure().add_subplot()
