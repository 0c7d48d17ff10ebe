"""kill -9 of a real-time run at random moments: nothing acknowledged is lost, and the run is made whole."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import threading
from pathlib import Path

import pytest
from cellar import FAST_BENCH, bench_file, hasty_target, target_file

from daq.journal import read_journal
from daq.records import Kind
from daq.runfile import read_run

SEED = 20310211
MOMENTS, BLOCK = 50, 10
LONGEST_S = 2.5

FAST_TARGET = hasty_target(separation_uncertainty_pm=0.001, time_s=3.5)


def acknowledged_until_killed(folder: Path, after_s: float) -> list[int]:
    """Start a run, kill it `after_s` after its first acknowledged record; every seq it acknowledged."""
    child = subprocess.Popen(
        [sys.executable, str(Path(__file__).parent / "acknowledging.py")]
        + [str(folder / name) for name in ("bench.toml", "target.toml", "runs")],
        stdout=subprocess.PIPE,
        env=os.environ | {"PYTHONPATH": str(Path(__file__).parents[1])},
    )
    assert child.stdout is not None
    first = child.stdout.readline()
    timer = threading.Timer(after_s, child.send_signal, [signal.SIGKILL])
    timer.start()
    lines = [first, *child.stdout.readlines()]
    child.wait()
    timer.cancel()
    child.stdout.close()
    assert child.returncode in (-signal.SIGKILL, 0)
    return [int(line.split()[0]) for line in lines if line.endswith(b"\n")]


@pytest.mark.slow
@pytest.mark.timeout(300)
@pytest.mark.parametrize("block", range(MOMENTS // BLOCK))
def test_kill_at_random_moments_loses_nothing_acknowledged(tmp_path: Path, block: int) -> None:
    """Fifty moments, ten a test, so that they need not wait for each other."""
    draw = random.Random(SEED)
    moments_s = [draw.uniform(0.0, LONGEST_S) for _ in range(MOMENTS)]
    points = 0
    for number in range(block * BLOCK, (block + 1) * BLOCK):
        after_s = moments_s[number]
        told = f"seed {SEED}, moment {number}, killed after {after_s:.4f} s"
        folder = tmp_path / f"{number:02d}"
        folder.mkdir()
        bench_file(folder, changes=FAST_BENCH)
        target_file(folder, FAST_TARGET)
        acknowledged = acknowledged_until_killed(folder, after_s)
        (journal,) = (folder / "runs").glob("*.journal")
        before = list(read_journal(journal))
        assert set(acknowledged) <= {record.seq for record in before}, told

        resume = number % 3 == 0
        command = [sys.executable, "-P", "-m", "daq", "recover", str(folder / "runs"), "--json"]
        done = subprocess.run(command + ["--resume"] * resume, capture_output=True, text=True, check=False)
        assert done.returncode == 0, f"{told}: {done.stderr}"
        (run,) = json.loads(done.stdout)["runs"]
        assert run["stop_reason"] == ("time-limit" if resume else "interrupted"), told

        after = list(read_journal(journal))
        assert after[: len(before)] == before, f"{told}: recovery changed what was recorded"
        file = read_run(Path(run["file"]))
        assert file.complete, told
        assert list(file.records()) == after, f"{told}: the file differs from the journal"
        points += sum(record.kind == Kind.POINT for record in before)
    assert points > 10 * BLOCK, "the kills came too early to mean anything"
    print(f"{BLOCK} kills, {points} points acknowledged before them, lost 0 (seed {SEED})")
