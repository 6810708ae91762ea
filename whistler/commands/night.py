"""``whistler night``: one catalogue of a folder of recordings, resumable."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from whistler.commands import common
from whistler.errors import Notice, UsageError


def night(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="Folder of recordings.")],
    out: Annotated[Path, typer.Option("--out", metavar="OUT", help="Folder for the catalogue.")],
    station: common.StationOption = None,
    json: common.JsonOption = False,
    channel: common.ChannelOption = "1",
    false_alarms: common.FalseAlarmsOption = 1.0,
    max_hops: common.MaxHopsOption = 5,
    density_prior: common.DensityPriorOption = "saturated",
    density_factor: common.DensityFactorOption = 1.0,
    fit_prior: common.FitPriorOption = "none",
    fit_prior_sd: common.FitPriorSdOption = 0.3,
    alpha: common.AlphaOption = 1.0,
    alpha_sd: common.AlphaSdOption = 0.65,
    overwrite: common.OverwriteOption = False,
    quiet: common.QuietOption = False,
    verbose: common.VerboseOption = False,
) -> None:
    """Measure a folder of recordings into one catalogue.

    Each result is saved as soon as it is done. The same command run again goes on where it was
    stopped, or does nothing.
    """
    from whistler.catalogue import document, json_text
    from whistler.night import measure_night

    settings = common.build_settings(
        station=station,
        channel=channel,
        false_alarms_per_hour=false_alarms,
        max_hops=max_hops,
        density_prior=density_prior,
        density_prior_factor=density_factor,
        fit_prior=fit_prior,
        fit_prior_sd_dex=fit_prior_sd,
        density_exponent=alpha,
        density_exponent_sd=alpha_sd,
    )
    if not folder.is_dir():
        raise UsageError(Notice("E605", str(folder), "not a folder", "name a folder of recordings"))
    tell = common.Reporter(quiet=quiet)
    with common.progress_bar(quiet=quiet) as progress:
        result = measure_night(
            folder, out, settings=settings, overwrite=overwrite, tell=tell, progress=progress
        )
    if not result.measured:
        tell(Notice("N402", str(out), "every recording is measured already", "nothing to do"))
    if json:
        print(json_text(document(result.entries, settings), indent=1))
    else:
        whistlers = sum(len(item.whistlers) for item in result.entries)
        print(f"{len(result.entries)} recordings, {whistlers} whistlers: {out / 'catalogue.csv'}")
    raise typer.Exit(common.exit_code(result.entries, result.refused))
