"""``whistler fit``: fit hand-picked points."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from whistler.commands import common
from whistler.errors import printable

if TYPE_CHECKING:
    from whistler.rows import WhistlerRow
    from whistler.settings import Settings


def fit(
    picks: Annotated[
        Path,
        typer.Argument(
            metavar="PICKS.csv", help="Columns frequency_hz,time_s[,time_sd_s][,trace]."
        ),
    ],
    hops: Annotated[int, typer.Option("--hops", metavar="N", help="Field-line crossings.")] = 1,
    sferic_time: Annotated[
        float | None,
        typer.Option("--sferic-time", metavar="S", help="Causative sferic at the receiver, s."),
    ] = None,
    sferic_time_sd: Annotated[
        float, typer.Option("--sferic-time-sd", metavar="S", help="One-sigma of --sferic-time, s.")
    ] = 0.002,
    lightning_time: Annotated[
        float | None,
        typer.Option("--lightning-time", metavar="S", help="Time of the stroke itself, s."),
    ] = None,
    l_value: Annotated[
        float | None,
        typer.Option("--l-value", metavar="L", help="Hold L at this; fit the density."),
    ] = None,
    date: Annotated[
        str | None, typer.Option("--date", metavar="ISO8601", help="UTC of time zero of the picks.")
    ] = None,
    station: common.StationOption = None,
    density_factor: common.DensityFactorOption = 1.0,
    fit_prior: common.FitPriorOption = "none",
    fit_prior_sd: common.FitPriorSdOption = 0.3,
    alpha: common.AlphaOption = 1.0,
    alpha_sd: common.AlphaSdOption = 0.65,
    out: Annotated[
        Path | None, typer.Option("--out", metavar="DIR", help="Folder for the catalogue.")
    ] = None,
    json: common.JsonOption = False,
    overwrite: common.OverwriteOption = False,
    quiet: common.QuietOption = False,
    verbose: common.VerboseOption = False,
) -> None:
    """Fit L, density and lightning time to hand-picked points.

    Times count from one common zero. Traces of one file are taken as paths of one stroke. Without
    time_sd_s a point counts as good to 5 ms; without --sferic-time or --lightning-time the time of
    the stroke is fitted too.
    """
    from whistler.catalogue import (
        document,
        json_text,
        picks_entry,
        prepare_output,
        write_catalogue,
    )
    from whistler.clock import parse_time
    from whistler.pickfit import fit_picks
    from whistler.picks import read_picks

    ties: dict[str, Any] = {
        "hops": hops,
        "sferic_time_s": sferic_time,
        "sferic_time_sd_s": sferic_time_sd,
        "lightning_time_s": lightning_time,
        "l_value": l_value,
    }
    declared = {
        "density_prior_factor": density_factor,
        "fit_prior": fit_prior,
        "fit_prior_sd_dex": fit_prior_sd,
        "density_exponent": alpha,
        "density_exponent_sd": alpha_sd,
    }
    settings = _settings(station, declared, date=date, **ties)
    zero = parse_time(date) if date else None
    traces = read_picks(picks)
    if out is not None:
        prepare_output(out, paths=[str(picks)], settings=settings, overwrite=overwrite)
    rows = fit_picks(traces, settings=settings, recording=str(picks), start_time=zero, **ties)
    item = picks_entry(str(picks), rows, start_time=zero)
    if out is not None:
        write_catalogue(out, [item], settings=settings)
    if json:
        print(json_text(document([item], settings), indent=1))
    else:
        _show(rows, out, settings)


def _settings(station: Path | None, declared: dict[str, Any], **told: Any) -> Settings:
    """Return settings that remember what the fit was told, after checking it."""
    common.require_hops(told["hops"])
    common.require_finite(
        sferic_time=told["sferic_time_s"],
        sferic_time_sd=told["sferic_time_sd_s"],
        lightning_time=told["lightning_time_s"],
    )
    return common.build_settings(station=station, options=tuple(told.items()), **declared)


def _show(rows: list[WhistlerRow], out: Path | None, settings: Settings) -> None:
    from whistler.commands.table import legend, rows_table

    print(rows_table(rows))
    print(f"\n{legend(settings)}")
    if out is not None:
        print(f"\nsaved in {printable(str(out))}: catalogue.csv")
