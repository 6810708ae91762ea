"""``whistler completeness``: what share of whistlers is found in a folder's audio."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from whistler.commands import common
from whistler.errors import Notice, UsageError, printable

if TYPE_CHECKING:
    from whistler.completeness import Completeness


def completeness(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="Folder of recordings.")],
    injections: Annotated[
        int, typer.Option("--injections", metavar="N", help="Whistlers to inject.")
    ] = 500,
    seed: Annotated[int, typer.Option("--seed", metavar="N", help="Seed of all draws.")] = 1,
    snr_range: Annotated[
        tuple[float, float],
        typer.Option("--snr-range", metavar="LOW HIGH", help="Strengths, dB."),
    ] = (-3.0, 12.0),
    l_range: Annotated[
        tuple[float, float], typer.Option("--l-range", metavar="LOW HIGH", help="L of the paths.")
    ] = (2.2, 4.6),
    station: common.StationOption = None,
    start: common.StartOption = None,
    out: Annotated[
        Path | None,
        typer.Option("--out", metavar="DIR", help="Folder for results, outside FOLDER."),
    ] = None,
    json: common.JsonOption = False,
    channel: common.ChannelOption = "1",
    false_alarms: common.FalseAlarmsOption = 1.0,
    max_hops: common.MaxHopsOption = 5,
    density_prior: common.DensityPriorOption = "saturated",
    density_factor: common.DensityFactorOption = 1.0,
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Replace results of something else.")
    ] = False,
    quiet: common.QuietOption = False,
    verbose: common.VerboseOption = False,
) -> None:
    """Find what share of whistlers is found in your own recordings.

    Synthetic whistlers of known strength are added to copies of the audio in memory, and the
    ordinary search is run on them; the recordings are only read. Prints a table, or one JSON
    document with --json. With --out the folder gets completeness.json, completeness.csv with one
    line for each whistler injected, and completeness.png.
    """
    from whistler.catalogue import json_text
    from whistler.clock import parse_time
    from whistler.commands.completeness_table import completeness_text
    from whistler.completeness import Request, measure_completeness
    from whistler.scorefiles import prepare_completeness, write_completeness
    from whistler.scores import completeness_document

    settings = common.build_settings(
        station=station,
        channel=channel,
        false_alarms_per_hour=false_alarms,
        max_hops=max_hops,
        density_prior=density_prior,
        density_prior_factor=density_factor,
        options=(("start", start),) if start else (),
    )
    began = parse_time(start) if start else None
    request = Request(injections, seed, l_range=l_range, snr_range_db=snr_range)
    request.check_l(settings)
    if not folder.is_dir():
        raise UsageError(Notice("E605", str(folder), "not a folder", "name a folder of recordings"))
    if out is not None:
        prepare_completeness(
            out, folder=folder, settings=settings, request=request, overwrite=overwrite
        )
    tell = common.Reporter(quiet=quiet)
    with common.progress_bar(quiet=quiet) as progress:
        result = measure_completeness(
            folder, settings=settings, request=request, start=began, tell=tell, progress=progress
        )
    document = completeness_document(result, folder=str(folder))
    if out is not None and result.injections:
        write_completeness(out, result, document=document)
    if json:
        print(json_text(document, indent=1))
    elif result.injections:
        print(completeness_text(document))
        if out is not None:
            print(f"\nsaved in {printable(str(out))}: completeness.json, .csv, .png")
    raise typer.Exit(_exit_code(result))


def _exit_code(result: Completeness) -> int:
    if any(notice.code == common.INTERNAL_CODE for notice in result.refused):
        return common.INTERNAL
    if not result.injections:
        return common.UNUSABLE
    whole = all(recording.complete for recording in result.recordings)
    return common.OK if whole and not result.refused else common.PARTLY
