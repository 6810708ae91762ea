"""``whistler synthesize``: recordings with known truth."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from whistler.commands import common
from whistler.errors import Notice, UsageError

if TYPE_CHECKING:
    from whistler.synthesis.scene import Scene


def synthesize(
    out: Annotated[Path, typer.Option("--out", metavar="DIR", help="Folder for the recordings.")],
    scenes: Annotated[
        list[Path] | None, typer.Argument(metavar="SCENE.toml", help="Scene files.")
    ] = None,
    l_value: Annotated[
        float | None, typer.Option("--l", metavar="L", help="L of the path, without scene file.")
    ] = None,
    density: Annotated[
        float | None, typer.Option("--density", metavar="CM3", help="Equatorial density, cm^-3.")
    ] = None,
    hops: Annotated[
        str, typer.Option("--hops", metavar="N[,N...]", help="Crossings, all odd or all even.")
    ] = "1",
    snr: Annotated[
        float, typer.Option("--snr", metavar="DB", help="Power over noise in a 21 ms cell, dB.")
    ] = 12.0,
    duration: Annotated[
        float, typer.Option("--duration", metavar="S", help="Length of the recording, s.")
    ] = 30.0,
    sferic_rate: Annotated[
        float, typer.Option("--sferic-rate", metavar="HZ", help="Background sferics a second.")
    ] = 20.0,
    sample_rate: Annotated[
        int, typer.Option("--sample-rate", metavar="HZ", help="Sampling rate, Hz.")
    ] = 48_000,
    seed: Annotated[
        int, typer.Option("--seed", metavar="N", help="Seed of everything random.")
    ] = 1,
    json: common.JsonOption = False,
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Replace files that hold something else.")
    ] = False,
    quiet: common.QuietOption = False,
    verbose: common.VerboseOption = False,
) -> None:
    """Write synthetic recordings with known truth.

    Each is NAME.flac with NAME.truth.json. Takes scene files (NAME.scene.toml), or --l and
    --density for one whistler in an ordinary background. The same scene gives the same files.
    --json prints the truth document, or for several scenes one document with all of them.
    """
    from whistler.synthesis.files import summary, truth_document, write_recordings
    from whistler.synthesis.quick import parse_hops, quick_scene
    from whistler.synthesis.scenefile import load_scene

    wanted: list[Scene] = [load_scene(path) for path in scenes or ()]
    if (l_value is None) != (density is None) or bool(wanted) == (l_value is not None):
        reason = "neither (or both) of scene files and --l with --density given"
        raise UsageError(Notice("E614", "synthesize", reason, "give one of the two"))
    if l_value is not None and density is not None:
        wanted = [
            quick_scene(
                l_value,
                equatorial_density_cm3=density,
                hops=parse_hops(hops),
                snr_db=snr,
                duration_s=duration,
                sferic_rate_hz=sferic_rate,
                sample_rate_hz=sample_rate,
                seed=seed,
            )
        ]
    written = write_recordings(wanted, out, overwrite=overwrite)
    print(truth_document(written) if json else summary(written), end="")
