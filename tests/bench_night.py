"""How long a long night takes: 36 000 points on one target under virtual time, and where the time goes.

    python tests/bench_night.py [SEED]

One run without a profiler for the wall time, then one with cProfile for the shares (which it distorts: what
calls many small functions looks larger). Goal out of reach, light for just so many points.
"""

from __future__ import annotations

import cProfile
import pstats
import sys
import tempfile
import time
from pathlib import Path

from cellar import Outcome, bench_file, run, target_file

POINTS = 36_000
DARK_SHARE = 1 / 57  # one dark point a sweep of this window
LIGHT_DWELL_S = 0.2
TARGET = f"""
format = 1
name = "Long night"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 3.0
[sweep]
dwell_s = {LIGHT_DWELL_S}
[goal]
separation_uncertainty_pm = 0.001
[limits]
time_s = 1e6
light_s = {{light_s}}
"""

# Module and function; their cumulative times do not overlap.
PARTS = {
    "machine": [("machine.py", "step")],
    "hands, drivers, simulated world": [("hands.py", "point"), ("hands.py", "prepare"), ("hands.py", "safe")],
    "journal": [("journal.py", "append"), ("journal.py", "flush"), ("journal.py", "close")],
    "looks": [("looks.py", "look")],
    "export": [("export.py", "export")],
}


def night(folder: Path, seed: int) -> Outcome:
    """One run of POINTS points, to within a sweep."""
    light_s = POINTS * (1.0 - DARK_SHARE) * LIGHT_DWELL_S
    folder.mkdir()
    return run(
        folder,
        bench=bench_file(folder),
        target=target_file(folder, TARGET.format(light_s=light_s)),
        seed=seed,
    )


def shares(profile: cProfile.Profile) -> dict[str, float]:
    """Each part's cumulative time over the whole; the rest is runner, event loop and start."""
    table = pstats.Stats(profile).stats  # type: ignore[attr-defined]
    whole = sum(row[2] for row in table.values())
    found = {}
    for part, entries in PARTS.items():
        rows = [
            row[3]
            for (file, _, function), row in table.items()
            if (Path(file).name, function) in entries and Path(file).parent.name == "daq"
        ]
        found[part] = sum(rows) / whole
    found["runner, event loop, the rest"] = 1.0 - sum(found.values())
    return found


def main(seed: int) -> None:
    with tempfile.TemporaryDirectory() as scratch:
        start = time.perf_counter()
        outcome = night(Path(scratch) / "timed", seed)
        wall_s = time.perf_counter() - start
        points = outcome.summary["points"]
        size = outcome.file.stat().st_size + outcome.journal.stat().st_size
        print(f"seed {seed}: {points} points, {outcome.machine.sweeps_done} sweeps, ", end="")
        print(f"{len(outcome.machine.looks)} looks, stopped: {outcome.summary['stop_reason']}")
        print(f"{wall_s:.2f} s wall, {1e6 * wall_s / points:.0f} us a point; ", end="")
        print(f"bench time {outcome.summary['bench_time_s'] / 3600:.1f} h; files {size / 2**20:.1f} MiB")

        profile = cProfile.Profile()
        profile.enable()
        night(Path(scratch) / "profiled", seed)
        profile.disable()
        for part, share in shares(profile).items():
            print(f"  {part:34} {share:6.1%}")
        pstats.Stats(profile).sort_stats("tottime").print_stats(12)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1)
