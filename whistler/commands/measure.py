"""``whistler measure``: find, trace, group and fit every whistler in recordings."""

from __future__ import annotations

from datetime import datetime
from pathlib import Path, PurePath
from typing import TYPE_CHECKING, Annotated

import typer

from whistler.commands import common
from whistler.errors import Notice, OutputError, UsageError, printable

if TYPE_CHECKING:
    from whistler.catalogue import Entry
    from whistler.measure import Measurement
    from whistler.night import Outcome
    from whistler.settings import Settings


def measure(
    recordings: Annotated[
        list[str], typer.Argument(metavar="RECORDING", help="Audio files to measure.")
    ],
    station: common.StationOption = None,
    start: common.StartOption = None,
    out: common.OutOption = None,
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
    figures: Annotated[bool, typer.Option(help="One figure a recording, with --out.")] = True,
    overwrite: common.OverwriteOption = False,
    quiet: common.QuietOption = False,
    verbose: common.VerboseOption = False,
) -> None:
    """Find, trace, group and fit every whistler in recordings.

    Prints a table, or one JSON document with --json. With --out the folder gets catalogue.csv, its
    description catalogue.csv.meta.json, catalogue.jsonl with the traces, run.json and a figure of
    each recording. Times, units and columns are explained in the README.
    """
    from whistler.catalogue import document, json_text, prepare_output
    from whistler.clock import parse_time

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
        options=(("start", start),) if start else (),
    )
    began = parse_time(start) if start else None
    paths = list(dict.fromkeys(recordings))
    if began is not None and len(paths) > 1:
        reason = f"one start time for {len(paths)} recordings"
        raise UsageError(Notice("E605", "--start", reason, "measure them one by one"))
    if out is not None:
        prepare_output(out, paths=paths, settings=settings, overwrite=overwrite)
    run = _Run(settings, out=out, figures=figures, table=not json, quiet=quiet)
    run.measure(paths, start=began)
    if json:
        print(json_text(document(run.entries, settings), indent=1))
    raise typer.Exit(common.exit_code(run.entries, [*run.refused, *run.faults]))


class _Run:
    """Measures recordings one by one and hands each result on before the next is begun."""

    def __init__(
        self, settings: Settings, *, out: Path | None, figures: bool, table: bool, quiet: bool
    ) -> None:
        self.entries: list[Entry] = []
        self.refused: list[Notice] = []
        self.faults: list[Notice] = []
        self._settings = settings
        self._out = out
        self._figures = figures
        self._table = table
        self._tell = common.Reporter(quiet=quiet)

    def measure(self, paths: list[str], *, start: datetime | None) -> None:
        """Measure all; whatever stops it, what is done is saved."""
        from whistler.catalogue import entry, write_catalogue
        from whistler.commands.table import legend

        try:
            for path in paths:
                outcome = self._measure_one(path, start=start)
                for notice in outcome.notices:
                    self._tell(notice)
                if outcome.refusal is not None:
                    self.refused.append(outcome.refusal)
                if outcome.measurement is not None:
                    self.entries.append(entry(outcome.measurement))
                    self._show(outcome.measurement)
        finally:
            if self._out is not None:
                write_catalogue(
                    self._out, self.entries, settings=self._settings, refused=self.refused
                )
        if any(item.whistlers for item in self.entries):
            self._print(legend(self._settings))
        if self._out is not None:
            self._print(f"\nsaved in {printable(str(self._out))}: {self._saved()}")

    def _saved(self) -> str:
        drawn = len(self.entries) - len(self.faults) if self._figures else 0
        return f"catalogue.csv, {drawn} figure{'' if drawn == 1 else 's'}"

    def _measure_one(self, path: str, *, start: datetime | None) -> Outcome:
        from whistler.night import measure_one

        with common.progress_bar(quiet=self._tell.quiet) as bar:
            return measure_one(
                path, self._settings, start=start, progress=lambda share: bar(share, 1.0)
            )

    def _show(self, measurement: Measurement) -> None:
        from whistler.commands.table import recording_table

        self._print(recording_table(measurement) + "\n")
        if self._out is None or not self._figures:
            return
        from whistler.figures import save_recording_figure
        from whistler.savefile import fault_notice

        path = measurement.recording.path
        try:
            save_recording_figure(measurement, self._figure_path(path))
        except OutputError:
            raise
        except Exception as error:  # a picture that fails must not cost the numbers
            self.faults.append(fault_notice(path, error))
            self._tell(self.faults[-1])

    def _print(self, text: str) -> None:
        """Print for reading; with a folder to fill, a reader who leaves does not end the work."""
        if not self._table:
            return
        try:
            print(text, flush=True)
        except BrokenPipeError:
            if self._out is None:
                raise
            common.mute_output()

    def _figure_path(self, path: str) -> Path:
        """Return a name for the figure that no other recording of this run has."""
        stem = PurePath(path).stem
        earlier = [PurePath(item.recording["path"]).stem for item in self.entries[:-1]]
        number = earlier.count(stem) + 1
        name = f"{stem}.png" if number == 1 else f"{stem}-{number}.png"
        return (self._out or Path()) / name
