"""Recordings made on the spot, and what every run of the command line must satisfy."""

from __future__ import annotations

import csv
import io
import re
import subprocess
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray

STUB = Path(__file__).with_name("stub_measure.py")
MESSAGE = re.compile(r'^(error|warning|note) [EWN]\d{3} "([^"\\\x00-\x1f\x7f]|\\.)*": .+; .+$')
RATE_HZ = 16_000


@dataclass(frozen=True)
class Run:
    code: int
    out: str
    err: str

    @property
    def codes(self) -> list[str]:
        return [line.split()[1] for line in self.err.splitlines()]


def checked(process: subprocess.CompletedProcess[bytes]) -> Run:
    """What every run must satisfy: no traceback, and nothing but messages on stderr."""
    out, err = process.stdout.decode(), process.stderr.decode()
    assert "Traceback" not in out + err
    for line in err.splitlines():
        assert MESSAGE.match(line), line
    return Run(process.returncode, out, err)


Whistler = Callable[..., Run]


def noise(duration_s: float = 2.0, *, channels: int = 1, seed: int = 1) -> NDArray[np.float32]:
    generator = np.random.default_rng(seed)
    shape = (round(duration_s * RATE_HZ), channels)
    return (0.1 * generator.standard_normal(shape)).astype(np.float32)


def write(path: Path, samples: NDArray[np.float32] | None = None, **options: object) -> Path:
    soundfile.write(path, noise() if samples is None else samples, RATE_HZ, **options)
    return path


def table(path: Path) -> list[dict[str, str]]:
    """The rows of a catalogue."""
    return list(csv.DictReader(io.StringIO(path.read_text(encoding="utf-8"), newline="")))
