"""``whistler fit``: fit points that were picked by hand, or measured and edited."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from whistler.commands import common
from whistler.errors import Notice, UsageError, printable

if TYPE_CHECKING:
    from whistler.commands.fitjob import Job, Told
    from whistler.rows import WhistlerRow

DECLARED = {
    "density_factor": "density_prior_factor",
    "fit_prior": "fit_prior",
    "fit_prior_sd": "fit_prior_sd_dex",
    "alpha": "density_exponent",
    "alpha_sd": "density_exponent_sd",
}
"""Field of the settings behind each option that, left out, leaves a saved result's in force."""


def fit(
    context: typer.Context,
    source: Annotated[
        Path,
        typer.Argument(
            metavar="POINTS", help="Table of picks (CSV), or a measured result (catalogue.jsonl)."
        ),
    ],
    group: Annotated[
        int | None, typer.Option("--group", metavar="N", help="Stroke of a measured result.")
    ] = None,
    recording: Annotated[
        str | None, typer.Option("--recording", metavar="NAME", help="Its recording, if several.")
    ] = None,
    trace: Annotated[
        str | None,
        typer.Option("--trace", metavar="N", help="Trace to edit: place in the stroke, or name."),
    ] = None,
    drop: Annotated[
        list[str] | None,
        typer.Option("--drop", metavar="HZ|LOW:HIGH", help="Drop a point, or all in a range."),
    ] = None,
    move: Annotated[
        list[str] | None,
        typer.Option("--move", metavar="HZ:S[:SD]", help="Move a point to this time (one-sigma)."),
    ] = None,
    add: Annotated[
        list[str] | None,
        typer.Option("--add", metavar="HZ:S[:SD]", help="Add a point at this time (one-sigma)."),
    ] = None,
    edits: Annotated[
        Path | None,
        typer.Option(
            "--edits",
            metavar="EDITS.csv",
            help="Columns action,frequency_hz,time_s[,time_sd_s][,trace].",
        ),
    ] = None,
    points: Annotated[
        bool, typer.Option("--points", help="List the points and what the fit leaves over.")
    ] = False,
    hops: Annotated[
        str | None,
        typer.Option("--hops", metavar="N[,N...]", help="Field-line crossings, of all or of each."),
    ] = None,
    free_time: Annotated[
        bool, typer.Option("--free-time", help="Fit the time; leave out the measured sferic.")
    ] = False,
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
    """Fit L, density and lightning time to points picked by hand, or measured and edited.

    Picks have columns frequency_hz,time_s[,time_sd_s][,trace]. Times count from one common zero;
    traces of one table are taken as paths of one stroke. Without time_sd_s a point counts as good
    to 5 ms; without --sferic-time or --lightning-time the time of the stroke is fitted too.

    Of a measured result (catalogue.jsonl, or what measure --json printed) the stroke --group is
    fitted again, with its sferic and its settings where no option replaces them. It is left as it
    is; --out writes a new one.

    Edits are made in this order: --edits, --drop, --move, --add.
    """
    from whistler.catalogue import document, json_text, prepare_output, write_catalogue
    from whistler.commands.fitjob import Told, collect_edits, read_job

    asked = {"drop": drop, "move": move, "add": add}
    told = Told(
        ties={
            "sferic_time_s": sferic_time,
            "sferic_time_sd_s": sferic_time_sd,
            "lightning_time_s": lightning_time,
            "l_value": l_value,
        },
        hops=_hops(hops),
        edits=collect_edits(edits, asked, trace=trace),
        date=date,
        station=station,
        declared=_given(context),
        group=group,
        recording=recording,
        free_time=free_time,
    )
    job = read_job(source, told, tell=common.Reporter(quiet=quiet))
    if out is not None:
        job.keep_input(out)
        prepare_output(out, paths=[job.path], settings=job.settings, overwrite=overwrite)
    rows = job.run()
    if out is not None:
        write_catalogue(out, [job.entry(rows)], settings=job.settings)
    if json:
        print(json_text(document([job.entry(rows)], job.settings), indent=1))
    else:
        _show(rows, job, told, out=out, points=points)


def _hops(text: str | None) -> tuple[int, ...] | None:
    if text is None:
        return None
    try:
        hops = tuple(int(part) for part in text.split(","))
    except ValueError as error:
        reason = f"{text!r} is not a list of whole numbers"
        raise UsageError(
            Notice("E615", "--hops", reason, "write for example 1 or 1,3,5")
        ) from error
    for order in hops:
        common.require_hops(order)
    return hops


def _given(context: typer.Context) -> dict[str, object]:
    """Return the fields of the settings that the command line gives."""
    given = {}
    for option, name in DECLARED.items():
        origin = context.get_parameter_source(option)
        if origin is not None and origin.name != "DEFAULT":
            given[name] = context.params[option]
    return given


def _show(rows: list[WhistlerRow], job: Job, told: Told, *, out: Path | None, points: bool) -> None:
    from whistler.commands.points import points_table
    from whistler.commands.table import legend, rows_table

    if job.recording != job.path:
        print(f"{printable(job.recording)}\n  points of {printable(job.path)}")
    print(rows_table(rows))
    for place, edit in enumerate(told.edits):
        print(f"{'' if place else 'edits':8}{printable(str(edit))}")
    if points:
        print(f"\n{points_table(rows, settings=job.settings)}")
    print(f"\n{legend(job.settings)}")
    if out is not None:
        print(f"\nsaved in {printable(str(out))}: catalogue.csv")
