"""What a user of the package finds at its top, and what a measurement shows in a notebook."""

from __future__ import annotations

import json
import math
import subprocess
import sys
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pytest
import soundfile

import whistler
from whistler.model import field_line_model
from whistler.rows import COLUMNS
from whistler.sferic import SfericCatalogue

HEAVY = ("numpy", "scipy", "matplotlib", "soundfile", "numba", "pandas", "typer", "fieldlines")


@pytest.fixture
def measurement() -> whistler.Measurement:
    settings = whistler.Settings()
    recording = whistler.Recording(
        path='<img src="x">_20250314T020000Z.wav',
        sample_rate_hz=24_000,
        frame_count=24_000,
        channels=1,
        channel=1,
        start_time=datetime(2025, 3, 14, 2, tzinfo=UTC),
        start_time_source="file name",
    )
    row = whistler.WhistlerRow(
        recording=recording.path,
        group=1,
        sferic_time_s=0.25,
        time="2025-03-14T02:00:00.250Z",
        l_value=2.5,
        l_value_sd=0.0123456789,
        equatorial_density_cm3=1200.0,
        flags=("echo", "<b>"),
    )
    return whistler.Measurement(
        recording=recording,
        settings=settings,
        rows=(row, replace(row, group=2, l_value=math.nan, time=None, flags=())),
        notices=(),
        views=(),
        sferics=SfericCatalogue(np.zeros(0), np.zeros(0), 1.0),
        model=field_line_model(settings, decimal_year=2025.0),
    )


def test_every_public_name_is_there_and_documented() -> None:
    assert whistler.__all__ == sorted(whistler.__all__)
    for name in whistler.__all__:
        assert getattr(whistler, name).__doc__
    assert set(whistler.__all__) <= set(dir(whistler))
    with pytest.raises(AttributeError, match="no attribute 'nonsense'"):
        _ = whistler.nonsense


def test_importing_the_package_loads_nothing_heavy() -> None:
    program = f"import sys, whistler; print(sorted(set(sys.modules) & set({HEAVY})))"
    process = subprocess.run([sys.executable, "-c", program], capture_output=True, check=True)
    assert process.stdout.strip() == b"[]"


def test_table_has_the_columns_of_the_catalogue(measurement: whistler.Measurement) -> None:
    table = measurement.to_pandas()
    assert list(table.columns) == [column.name for column in COLUMNS]
    assert table["l_value_sd"][0] == 0.0123456789  # not rounded
    assert math.isnan(table["l_value"][1])
    assert list(table["flags"]) == ["echo <b>", ""]
    assert table["time"][0].isoformat() == "2025-03-14T02:00:00.250000+00:00"
    assert len(replace(measurement, rows=()).to_pandas()) == 0


def test_without_pandas_the_extra_is_named(
    measurement: whistler.Measurement, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, "pandas", None)
    with pytest.raises(ImportError, match=r"install it with .*\[notebook\]"):
        measurement.to_pandas()


def test_json_is_the_document_of_the_command(measurement: whistler.Measurement) -> None:
    def refuse(constant: str) -> None:
        raise AssertionError(constant)

    document = json.loads(measurement.to_json(), parse_constant=refuse)
    assert document["schema"] == 1
    assert [row["l_value"] for row in document["whistlers"]] == [2.5, None]
    assert document["settings"]["max_hops"] == measurement.settings.max_hops


def test_html_is_a_table_of_escaped_text(measurement: whistler.Measurement) -> None:
    html = measurement._repr_html_()
    assert "&lt;img src=" in html and "<img" not in html
    assert "<td>echo &lt;b&gt;</td>" in html
    assert html.count("<tr>") == 3
    assert "<td>2.500 ± 0.01 (± –)</td>" in html
    assert "nan" not in html


def test_plot_is_of_the_whole_or_of_one_stroke(measurement: whistler.Measurement) -> None:
    whole, stroke = measurement.plot(), measurement.plot(group=1)
    assert whole.axes[0].get_ylabel() == "L"
    assert stroke.axes[0].get_legend().get_title().get_text().startswith("Stroke 1")
    with pytest.raises(ValueError, match="group=9"):
        measurement.plot(group=9)


def test_files_are_measured_by_path_with_the_settings_channel(tmp_path: Path) -> None:
    path = tmp_path / "two.wav"
    noise = np.random.default_rng(3).normal(scale=0.1, size=(48_000, 2))
    soundfile.write(path, noise, 16_000)
    measured = whistler.measure_recording(path, whistler.Settings(channel=2))
    assert measured.recording.channel == 2
    assert measured.rows == ()
    assert repr(measured) == f"<Measurement of {str(path)!r}: 0 traces>"
