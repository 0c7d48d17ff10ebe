"""A child process that measures in real time and writes the number of every acknowledged record to a pipe.

python tests/acknowledging.py BENCH TARGET FOLDER
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

from daq.night import NightOrder, run_night
from daq.runner import Notice
from daq.target import load_target
from drivers.bench import load_bench
from drivers.clock import Clock, run_real


def tell(notice: Notice) -> None:
    os.write(1, f"{notice.seq} {notice.kind}\n".encode())


def main(bench: str, target: str, folder: str) -> None:
    order = NightOrder(bench=load_bench(bench), targets=[load_target(target)], out=Path(folder), seed=7)

    async def work(clock: Clock) -> object:
        return await run_night(order, clock, observe=tell)

    run_real(work)


if __name__ == "__main__":
    main(*sys.argv[1:])
