"""The command line as a process of its own, and a recording to give it."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest
from shell_helpers import STUB, Run, Whistler, checked, write


@pytest.fixture
def whistler(tmp_path: Path) -> Whistler:
    """Run the command line with the stand-in analysis, in a fresh folder."""

    def run(*arguments: str | bytes | Path, timeout: float = 60, **environment: str) -> Run:
        process = subprocess.run(
            [sys.executable, str(STUB), *arguments],
            cwd=tmp_path,
            env={**os.environ, "NO_COLOR": "1", "COLUMNS": "80", **environment},
            stdin=subprocess.DEVNULL,
            capture_output=True,
            timeout=timeout,
        )
        return checked(process)

    return run


@pytest.fixture
def wav(tmp_path: Path) -> Path:
    return write(tmp_path / "good_20250314T021500Z.wav", subtype="PCM_16")
