"""The demo night over many seeds, held against the truth behind it.

    python tests/bench_demo.py [FIRST_SEED [COUNT]]

Prints, for every target, the verdicts, the pulls of separation and ratio, what it cost, and how long a night
takes on this machine. The truth is that of configs/benches/emberlight-7.toml.
"""

from __future__ import annotations

import json
import statistics
import subprocess
import sys
import tempfile
import time
from collections import Counter
from concurrent.futures import ThreadPoolExecutor
from typing import Any

from commandline import PROGRAM, surroundings
from demo_truth import ALLOWED, TRUTH, faults_of


def night(seed: int) -> tuple[float, list[dict[str, Any]]]:
    with tempfile.TemporaryDirectory() as folder:
        began = time.perf_counter()
        done = subprocess.run(
            [*PROGRAM, "demo", "--json", "--seed", str(seed), "--out", "night"],
            cwd=folder, env=surroundings(), stdout=subprocess.PIPE, text=True, check=True,
        )  # fmt: skip
        return time.perf_counter() - began, json.loads(done.stdout)["runs"]


def main() -> None:
    first, count = (int(word) for word in (*sys.argv[1:], *("100", "20")[len(sys.argv) - 1 :]))
    seeds = range(first, first + count)
    with ThreadPoolExecutor(2) as pool:
        nights = list(pool.map(night, seeds))
    print(f"seeds {seeds[0]}..{seeds[-1]}, two nights at a time")
    print(f"wall time of a night: median {statistics.median(seconds for seconds, _ in nights):.1f} s")
    for target in ALLOWED:
        runs = [run for _, made in nights for run in made if run["target"] == target]
        print(f"\n{target}: {dict(Counter(run['verdict'] for run in runs))}", end="  ")
        print(f"{dict(Counter(run['stop_reason'] for run in runs))}")
        print(f"  median bench time {statistics.median(run['bench_time_s'] for run in runs):.0f} s", end=", ")
        print(f"points {statistics.median(run['points'] for run in runs):.0f}", end=", ")
        print(f"flags {dict(Counter(flag for run in runs for flag in run['flags']))}")
        for key, truth in TRUTH.get(target, {}).items():
            pairs = [run for run in runs if run["verdict"] == "pair"]
            pulls = [
                (run[key] - truth) / run[key.replace("_pm", "_u_pm") if "_pm" in key else f"{key}_u"]
                for run in pairs
            ]
            if len(pulls) > 1:
                print(
                    f"  {key}: pulls {statistics.mean(pulls):+.2f} ± {statistics.stdev(pulls):.2f}", end=", "
                )
                print(f"furthest {max(pulls, key=abs):+.1f}")
    problems = [
        f"seed {seed}: {text}"
        for seed, (_, runs) in zip(seeds, nights, strict=True)
        for text in faults_of(runs)
    ]
    print("\n" + ("\n".join(problems) or "nothing that must not be"))


if __name__ == "__main__":
    main()
