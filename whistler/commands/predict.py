"""``whistler predict``: travel time against frequency for a given path."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from whistler.commands import common
from whistler.errors import Notice, UsageError


def predict(
    l_value: Annotated[float, typer.Option("--l", metavar="L", help="L of the path.")],
    density: Annotated[
        float, typer.Option("--density", metavar="CM3", help="Equatorial density, cm^-3.")
    ],
    alpha: Annotated[
        float, typer.Option("--alpha", metavar="A", help="Density along the line goes as r^-A.")
    ] = 1.0,
    date: Annotated[
        str, typer.Option("--date", metavar="ISO8601", help="Date of the Earth's field, UTC.")
    ] = "2025-01-01",
    frequencies: Annotated[
        str | None,
        typer.Option(
            "--frequencies", metavar="HZ,HZ,...", help="In place of every 500 Hz up to 10 kHz."
        ),
    ] = None,
    hops: Annotated[int, typer.Option("--hops", metavar="N", help="Field-line crossings.")] = 1,
    figure: Annotated[
        Path | None, typer.Option("--figure", metavar="FILE", help="Draw it: .png, .pdf, .svg.")
    ] = None,
    station: common.StationOption = None,
    json: common.JsonOption = False,
    quiet: common.QuietOption = False,
    verbose: common.VerboseOption = False,
) -> None:
    """Predict travel time against frequency for given L and density.

    Times count from the lightning. Nose, dispersion and tube content are of one hop.
    """
    from whistler import prediction
    from whistler.catalogue import SCHEMA, json_text
    from whistler.clock import decimal_year, parse_time
    from whistler.model import field_line_model

    settings = common.build_settings(station=station, density_exponent=alpha)
    common.require_hops(hops)
    year = decimal_year(parse_time(date))
    path = prediction.predict_path(
        l_value,
        density_cm3=density,
        model=field_line_model(settings, decimal_year=year),
        hops=hops,
        frequencies_hz=_numbers(frequencies) if frequencies is not None else None,
    )
    if figure is not None:
        prediction.save_prediction_figure(path, figure)
    if json:
        inputs = {"l_value": l_value, "equatorial_density_cm3": density, "hops": hops, "date": date}
        used = {**inputs, "density_exponent": alpha, "station": settings.station.to_dict()}
        print(json_text({"schema": SCHEMA, "settings": used, **path.to_dict()}, indent=1))
    else:
        print(prediction.prediction_text(path))


def _numbers(text: str) -> list[float]:
    """Return numbers separated by commas."""
    try:
        return [float(part) for part in text.split(",")]
    except ValueError as error:
        reason = f"{text!r} is not a list of numbers"
        notice = Notice("E605", "--frequencies", reason, "write it as 1000,2000,5000")
        raise UsageError(notice) from error
