"""By hand, not by pytest: error rates, sweeps to the goal and the cost of a look.

python tests/bench_fit.py null|pair|single|faint|cost [RUNS] [FIRST_SEED]
"""

from __future__ import annotations

import sys
import time
from collections import Counter

import numpy as np
from emulated import FWHM_NM, LOOKS, Lamp, night, question

from analysis.question import Evidence
from analysis.verdict import look


def null(seed: int) -> Lamp:
    draw = np.random.Generator(np.random.Philox(key=[seed, 1]))
    return Lamp(
        seed,
        line_fwhm_nm=draw.uniform(0.002, 0.005),
        background_per_s=draw.uniform(3.0, 30.0),
        slope=draw.uniform(-0.5, 0.5),
        skewness=draw.choice([-0.01, 0.0, 0.01]),
        peak_per_s=draw.choice([50.0, 200.0, 2000.0]),
    )


def rates(kind: str, runs: int, first: int) -> None:
    said: Counter[str] = Counter()
    sweeps, pulls, alarms = [], [], 0
    for seed in range(first, first + runs):
        asked = question(false_alarm=0.05 if kind == "null" else 1e-3)
        side = 1.0 if seed % 2 else -1.0
        lamp = {
            "null": lambda seed=seed: null(seed),
            "single": lambda seed=seed: Lamp(seed),
            "pair": lambda seed=seed: Lamp(seed, separation_fwhm=1.0, ratio=0.5),
            "faint": lambda seed=seed, side=side: Lamp(seed, separation_fwhm=side, ratio=0.1),
        }[kind]()
        last = night(lamp, asked, stop=kind != "null")[-1]
        said[last.verdict] += 1
        sweeps.append(lamp.sweeps)
        alarms += last.max_log_e_pair >= last.bound_pair
        if last.separation_nm is not None and last.separation_u_nm:
            pulls.append((last.separation_nm - FWHM_NM) / last.separation_u_nm)
    print(f"{kind}: {runs} runs from seed {first}, looks after {LOOKS} sweeps: {dict(said)}")
    print(f"pairs claimed {alarms}; sweeps median {np.median(sweeps):g}, mean {np.mean(sweeps):.1f}")
    if kind == "pair":
        print(f"pull of the separation: mean {np.mean(pulls):.2f}, sd {np.std(pulls):.2f}")


def cost() -> None:
    lamp, asked = Lamp(1), question()
    for _ in range(4):
        lamp.sweep()
    first = lamp.counts()
    one = look(Evidence(first), asked, None)
    for _ in range(8):
        lamp.sweep()
    evidence = Evidence(lamp.counts(), first, first)
    begin = time.process_time()
    for _ in range(20):
        look(evidence, asked, one)
    each = (time.process_time() - begin) / 20.0
    print(f"{first.counts.size} positions, 2 dither groups: {1e3 * each:.0f} ms of processor a look")


if __name__ == "__main__":
    kind = sys.argv[1] if len(sys.argv) > 1 else "cost"
    if kind == "cost":
        cost()
    else:
        numbers = [int(word) for word in sys.argv[2:]]
        rates(kind, *(numbers + [40, 1000][len(numbers) :]))
