"""By hand, not by pytest: how often a single line becomes a pair where something is not what it is taken for.

python tests/bench_verdict.py dead-time [RUNS] [FIRST_SEED] [PEAK_PER_S]

Every line gives claims of a pair at a level of 0.05, and the 95 % upper limit of their rate (binomial).
"""

from __future__ import annotations

import sys

from dead_time import BehindDeadTime, ask
from emulated import night
from scipy.stats import beta

LOOKS = (2, 3, 4, 6, 8, 12, 16)


def dead_time(runs: int, first: int, peak_per_s: float) -> None:
    print(f"{runs} runs from seed {first}, peak {peak_per_s:g}/s, looks after {LOOKS} sweeps, level 0.05")
    for load in (0.03, 0.1, 0.28):
        for off_by in (-2.0, -1.0, 0.0, 1.0, 2.0):
            said = 0
            for seed in range(first, first + runs):
                lamp = BehindDeadTime(seed, load=load, off_by=off_by, peak_per_s=peak_per_s)
                last = night(lamp, ask(shape_allowance=0.0), looks=LOOKS, stop=False)[-1]
                said += last.max_log_e_pair >= last.bound_pair
            limit = float(beta.ppf(0.95, said + 1, runs - said)) if said < runs else 1.0
            told = f"n tau {load:g}, tau off by {off_by:+g} u"
            print(f"{told}: {said} pairs claimed, rate < {limit:.3f}", flush=True)


if __name__ == "__main__":
    numbers = [float(word) for word in sys.argv[2:]]
    runs, first, peak = numbers + [40.0, 5000.0, 3e5][len(numbers) :]
    dead_time(int(runs), int(first), peak)
