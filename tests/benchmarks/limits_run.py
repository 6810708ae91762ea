"""Scenes of a campaign measured in processes of their own, one thread each; what parts hand back.

A scene's result depends on its seed only, not on which process takes it or when.
"""

from __future__ import annotations

import multiprocessing
import os
import sys
import tempfile
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import TypeVar

from promises import Figure, Grid, table
from scoring import Scored, measure_scene

from whistler.settings import Settings
from whistler.synthesis.scene import Scene

Item = TypeVar("Item")
Result = TypeVar("Result")
ONE_THREAD = ("NUMBA_NUM_THREADS", "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS")


@dataclass(frozen=True)
class Options:
    """How much is measured, on which seeds, by how many processes."""

    first_seed: int = 101_000
    quick: bool = False
    workers: int = 2
    recordings: Path | None = None

    def amount(self, full: int, *, quick: int) -> int:
        """One of two amounts."""
        return quick if self.quick else full


@dataclass(frozen=True)
class Part:
    """What one part of the campaign measured: figures, tables, remarks on method, odd cases."""

    title: str
    figures: tuple[Figure, ...]
    grids: tuple[Grid, ...] = ()
    notes: tuple[str, ...] = ()
    oddities: tuple[str, ...] = ()

    def __str__(self) -> str:
        """Return Markdown."""
        lines = [table(self.title, self.figures), *map(str, self.grids)]
        lines += [f"{note}\n" for note in self.notes]
        if self.oddities:
            lines += ["Oddities:\n", *[f"- {line}" for line in self.oddities], ""]
        return "\n".join(lines)


@dataclass(frozen=True)
class Job:
    """One scene to be measured."""

    seed: int
    scene: Scene
    settings: Settings = field(default_factory=Settings)


def jobs_until(draw: Callable[[int], Scene], seeds: Iterable[int], *, least: int) -> list[Job]:
    """Scenes, seed by seed, until they hold `least` whistlers (every hop of every path)."""
    jobs: list[Job] = []
    count = 0
    for seed in seeds:
        scene = draw(seed)
        jobs.append(Job(seed, scene))
        count += sum(len(path.hops) for stroke in scene.strokes for path in stroke.paths)
        if count >= least:
            break
    return jobs


def measure_job(job: Job) -> Scored:
    """Render, measure and score one scene."""
    with tempfile.TemporaryDirectory() as folder:
        return measure_scene(job.scene, seed=job.seed, folder=Path(folder), settings=job.settings)


def measure_all(jobs: Sequence[Job], options: Options, *, name: str) -> list[Scored]:
    """All scenes measured, in their order."""
    return shared_out(measure_job, jobs, options, name=name)


def shared_out(
    work: Callable[[Item], Result], items: Sequence[Item], options: Options, *, name: str
) -> list[Result]:
    """What `work` makes of every item, in their order, by several processes."""
    results: list[Result] = []
    for result in _results(work, items, options.workers):
        results.append(result)
        if len(results) % 10 == 0 or len(results) == len(items):
            print(f"{name}: {len(results)} of {len(items)}", file=sys.stderr, flush=True)
    return results


def _results(
    work: Callable[[Item], Result], items: Sequence[Item], workers: int
) -> Iterable[Result]:
    if workers <= 1:
        yield from map(work, items)
        return
    # Compiled code reads its number of threads when it is first imported, which the child does.
    os.environ.update(dict.fromkeys(ONE_THREAD, "1"))
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        yield from pool.map(work, items)
