"""The full measurement campaign: every promise of the tool beside what it reaches.

Run by hand, with nothing else running on the machine:

    python -m tests.benchmarks.campaign [--whistlers 300] [--minutes 40] [--first-seed N] [--json]

Whistlers and decoys are drawn from fixed seeds, and go through rendering, FLAC, opening and
measuring, as in the small campaign of the ordinary test run, whose matching and scoring
(`tests/pipeline/scoring.py`) is used. Matching rule: one-to-one, and the median distance in time of
a row's points from the true trace is at most 30 ms. An undetermined number is an infinite error.

The statistical sigmas are scored on strokes at the conjugate foot and the default model, which is
what they are conditional on. A second campaign has strokes 800 km astray and another density
exponent and F2 layer in every recording, to see what the statistical and the profile sigma cover
together: for information only.
"""

from __future__ import annotations

import argparse
import json
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "pipeline"))

from promises import Figure, plain, table
from scoring import (
    Scored,
    Summary,
    campaign_scene,
    coverage,
    measure_scene,
    problems,
    promised,
    quantile,
    run_campaign,
    run_decoys,
)

from whistler.synthesis.draw import Campaign
from whistler.synthesis.files import flac_bytes
from whistler.synthesis.render import render
from whistler.synthesis.strokes import Medium

ROOT = Path(__file__).parents[2]
FIRST_WHISTLER_SEED = 71_001  # far from every seed the program was tuned on
FIRST_DECOY_SEED = 80_001
FIRST_ASTRAY_SEED = 90_001
COMMAND = [sys.executable, "-c", "from whistler.cli import main; main()"]
REPEATS = 5


def progress(text: str) -> None:
    print(text, file=sys.stderr, flush=True)


def seconds(command: Sequence[str], **environment: str) -> float:
    """Wall time of a process."""
    begin = time.perf_counter()
    subprocess.run(
        command,
        cwd=ROOT,
        env={**os.environ, **environment},
        check=True,
        stdout=subprocess.DEVNULL,
    )
    return time.perf_counter() - begin


def typical_s(command: Sequence[str]) -> float:
    """Median wall time after one run to warm the caches."""
    seconds(command)
    return statistics.median(seconds(command) for _ in range(REPEATS))


def timing() -> list[Figure]:
    """A minute measured, first and ever after, and the help shown, by processes of their own."""
    scene = campaign_scene(FIRST_WHISTLER_SEED, campaign=Campaign())
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "minute.flac"
        path.write_bytes(flac_bytes(render(scene)))
        command = [*COMMAND, "measure", str(path), "--quiet"]
        first_s = seconds(command, NUMBA_CACHE_DIR=str(Path(folder) / "fresh"))
        measure_s = typical_s(command)
    help_s = typical_s([*COMMAND, "--help"])
    bare_s = typical_s([sys.executable, "-c", "import typer"])
    return [
        Figure("60 s recording measured, start-up included", measure_s, high=6, unit="s"),
        Figure("the same with nothing compiled yet", first_s, high=20, unit="s"),
        Figure("whistler --help over import typer", help_s / bare_s, high=3, unit="times"),
    ]


def false_alarms(decoys: Summary) -> list[Figure]:
    """False rows, per 20 minutes as promised."""
    count = len(decoys.extra)
    return [
        Figure("decoys measured", decoys.minutes, unit="min"),
        Figure("false rows in them", count, unit=""),
        Figure("false rows in 20 min", count * 20.0 / decoys.minutes, high=1, unit=""),
    ]


def more(summary: Summary) -> list[Figure]:
    """What is not promised but worth knowing."""
    snr_db = np.array([pair.truth.snr_db for pair in summary.pairs])
    found = np.array([pair.row is not None for pair in summary.pairs])
    weak = snr_db < 12.0
    return [
        Figure("true traces", len(summary.pairs), unit=""),
        Figure("audio", summary.minutes, unit="min"),
        Figure("found below 12 dB", 100 * float(found[weak].mean())),
        Figure("rows without a true trace", len(summary.extra), unit=""),
        Figure("rows with status ok", 100 * summary.determined_share),
        Figure("heard sferics identified", 100 * summary.identified_share),
    ]


def astray_campaign(seed: int) -> Campaign:
    """Strokes 800 km astray and a medium of its own for every recording."""
    generator = np.random.default_rng([seed, 1])
    medium = Medium(
        density_exponent=float(np.clip(generator.normal(1.0, 0.65), 0.0, 4.0)),
        fo_f2_mhz=float(np.clip(generator.normal(5.0, 1.5), 1.5, 12.0)),
        hm_f2_km=float(np.clip(generator.normal(300.0, 40.0), 200.0, 420.0)),
    )
    return Campaign(offset_sd_m=800e3, medium=medium)


def run_astray(least: int) -> Summary:
    """The same scoring where the model is wrong by as much as the profile sigma allows for."""
    done: list[Scored] = []
    with tempfile.TemporaryDirectory() as folder:
        for seed in range(FIRST_ASTRAY_SEED, FIRST_ASTRAY_SEED + 1000):
            scene = campaign_scene(seed, campaign=astray_campaign(seed), duration_s=20.0)
            done.append(measure_scene(scene, seed=seed, folder=Path(folder)))
            if sum(len(one.pairs) for one in done) >= least:
                break
    return Summary.of(done)


def astray(summary: Summary) -> Iterator[Figure]:
    """Errors, and what statistical and profile sigma together cover."""
    yield Figure("true traces", len(summary.pairs), unit="")
    yield Figure("traces found", 100 * summary.found_share)
    yield Figure("hop order right", 100 * summary.hops_share)
    yield Figure("identified sferics within 5 ms", 100 * summary.sferic_share)
    errors = {"L": summary.l_error, "density": summary.density_error}
    pulls = dict(zip(errors, summary.pulls(profile=True), strict=True))
    for name, error in errors.items():
        yield Figure(f"error of {name}, median", 100 * quantile(error, 0.5))
        yield Figure(f"error of {name}, 90th percentile", 100 * quantile(error, 0.9))
        yield Figure(f"{name} within one combined sigma", 100 * coverage(pulls[name], 1.0))
        yield Figure(f"{name} within 1.96 combined sigma", 100 * coverage(pulls[name], 1.96))


def main() -> int:
    """Run everything; 0 when every promise is kept."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawTextHelpFormatter
    )
    parser.add_argument("--whistlers", type=int, default=300, help="true traces, at least")
    parser.add_argument("--minutes", type=int, default=40, help="minutes of decoys")
    parser.add_argument(
        "--astray", type=int, default=150, help="true traces of the second campaign"
    )
    parser.add_argument(
        "--first-seed", type=int, default=FIRST_WHISTLER_SEED, help="of the whistlers"
    )
    parser.add_argument("--json", action="store_true", help="print one JSON document")
    options = parser.parse_args()

    progress("timing")
    parts = {"Speed": timing()}
    progress("whistlers")
    seeds = range(options.first_seed, options.first_seed + 1000)
    summary = Summary.of(
        run_campaign(seeds, campaign=Campaign(offset_sd_m=0.0), least=options.whistlers)
    )
    parts["Whistlers"] = [*promised(summary), *more(summary)]
    progress("decoys")
    seeds = range(FIRST_DECOY_SEED, FIRST_DECOY_SEED + options.minutes)
    decoys = Summary.of(run_decoys(seeds))
    parts["Decoys"] = false_alarms(decoys)
    oddities = [*problems(summary), *problems(decoys)]
    if options.astray > 0:
        progress("strokes and model astray")
        parts["Strokes and model astray (information only)"] = list(
            astray(run_astray(options.astray))
        )
    if options.json:
        document = {title: [plain(figure) for figure in part] for title, part in parts.items()}
        print(json.dumps({"figures": document, "oddities": oddities}, allow_nan=False, indent=1))
    else:
        print("\n".join(table(title, figures) for title, figures in parts.items()))
        print("### Oddities\n\n" + "\n".join(f"- {line}" for line in oddities))
    return 0 if all(figure.kept for figures in parts.values() for figure in figures) else 1


if __name__ == "__main__":
    sys.exit(main())
