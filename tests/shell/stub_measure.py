"""A stand-in for the analysis: instant, with faults on demand by the name of the file.

The shell is what these tests look at; the real analysis has its own.
"""

from __future__ import annotations

import os
import signal
import sys
import time
import types
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from fieldlines.errors import DomainError
from whistler.errors import Notice
from whistler.recording import Recording
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.trace import Trace


@dataclass(frozen=True)
class Measurement:
    recording: Recording
    settings: Settings
    rows: tuple[WhistlerRow, ...]
    notices: tuple[Notice, ...]
    views: tuple[Any, ...] = ()
    false_alarms_per_hour: float = float("nan")


def measure_recording(recording: Recording, settings: Settings, *, progress: Any = None) -> Any:
    name = Path(recording.path).name
    if "fault" in name:
        raise RuntimeError("planted\nfault")
    if "domain" in name:
        raise DomainError("l_value", 0.5, allowed="1.2 to 8", next_step="choose a longer path")
    if "interrupt" in name and not os.environ.get("STUB_CALM"):
        os.kill(os.getpid(), signal.SIGINT)
        time.sleep(5)
    if "slow" in name:
        time.sleep(float(os.environ.get("STUB_SLOW_S", "1")))
    usable = sum(int(block.usable.sum()) for block in recording.blocks(10.0))
    trace = Trace(np.array([1e3, 2e3, 4e3]), np.array([2.5, 2.25, 2.125]), np.full(3, 0.002))
    good = WhistlerRow(
        recording=recording.path,
        group=1,
        sferic_time_s=1.25,
        sferic_seen=True,
        hops=1,
        l_value=3.0,
        l_value_sd=0.0123456789,
        equatorial_density_cm3=float(usable),
        uncertainty_status="ok",
        flags=("faint", "cut"),
        trace=trace,
    )
    empty = WhistlerRow(recording=recording.path, group=2, hops=2)
    return Measurement(recording, settings, (good, empty), ())


def save_recording_figure(measurement: Measurement, path: Path) -> None:
    if "nofigure" in Path(path).name:
        raise RuntimeError("planted fault of a figure")
    Path(path).write_bytes(b"figure of " + os.fsencode(measurement.recording.path))


def install() -> None:
    for name, members in {
        "whistler.measure": (Measurement, measure_recording),
        "whistler.figures": (save_recording_figure,),
    }.items():
        module = types.ModuleType(name)
        for member in members:
            setattr(module, member.__name__, member)
        sys.modules[name] = module


if __name__ == "__main__":
    install()
    from whistler.cli import main

    main()
