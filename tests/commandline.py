"""The program as users start it: in child processes, guard included, far from the checkout's own folder."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[1]
PROGRAM = (sys.executable, "-P", "-m", "daq")


def surroundings(more: Mapping[str, str] | None = None) -> dict[str, str]:
    """The environment of a child: this checkout's packages and a terminal of known width."""
    plain = {k: v for k, v in os.environ.items() if k not in ("PYTHONHASHSEED", "COLUMNS", "FORCE_COLOR")}
    return plain | {"PYTHONPATH": str(ROOT), "COLUMNS": "100", "TERM": "xterm"} | dict(more or {})


def gratingd(
    *arguments: str | Path, cwd: Path, more: Mapping[str, str] | None = None, **options: Any
) -> subprocess.CompletedProcess[str]:
    """Run it to its end."""
    options = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE} | options
    return subprocess.run(
        [*PROGRAM, *map(str, arguments)],
        cwd=cwd,
        env=surroundings(more),
        text=True,
        timeout=120,
        check=False,
        **options,
    )


def start(
    *arguments: str | Path, cwd: Path, before: Sequence[str] = (), **options: Any
) -> subprocess.Popen[str]:
    """Start it; `before` stands in front of the command (nohup, say)."""
    options = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE} | options
    return subprocess.Popen(
        [*before, *PROGRAM, *map(str, arguments)], cwd=cwd, env=surroundings(), text=True, **options
    )


def complaint(done: subprocess.CompletedProcess[str], code: int) -> str:
    """What a refused command said: in its own voice, no traceback, nothing on standard output."""
    assert done.returncode == code, f"{done.returncode}: {done.stderr}"
    assert "Traceback" not in done.stderr
    assert done.stdout == ""
    assert done.stderr.strip()
    return done.stderr
