"""What the pipeline tests share: the default model, its banks, white noise, and the scorer."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

from fieldlines import FieldLineModel
from whistler.discovery import Banks
from whistler.model import field_line_model
from whistler.settings import Settings

sys.path.insert(0, str(Path(__file__).parent))  # for `scoring` and `makers`, shared by the tests


@pytest.fixture(scope="session")
def settings() -> Settings:
    return Settings()


@pytest.fixture(scope="session")
def model(settings: Settings) -> FieldLineModel:
    return field_line_model(settings, decimal_year=2025.0)


@pytest.fixture(scope="session")
def banks(model: FieldLineModel, settings: Settings) -> Banks:
    return Banks(model, settings)
