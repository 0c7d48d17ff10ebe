"""Looks: the analysis asked from the runner, inline under virtual time, in a worker process in real time.

A fit in a thread of the daemon would hold its timers up; in a process it costs the daemon a few milliseconds.
Both ways run the same pure function on the same JSON-exact numbers, so they answer the same.
"""

from __future__ import annotations

import asyncio
import contextlib
import json
import os
import sys
from dataclasses import replace
from typing import Any, Protocol

import numpy as np

from analysis.counting import Counts
from analysis.question import Evidence, Look, Question, from_json, to_json
from analysis.readings import Reduced, Sums, reduce, reference_level_per_s
from analysis.verdict import look
from daq.machine import StartLook
from daq.planned import detector_law, mount_of, reference_law
from daq.records import Body
from daq.tally import Snapshot
from drivers.errors import GratingdError

LARGEST_LINE_BYTES = 1 << 26
LONGEST_LOOK_S = 120.0


class LookError(GratingdError):
    """The analysis failed, or its worker died twice on the same look."""


class Looker(Protocol):
    async def look(self, request: StartLook) -> dict[str, Any]: ...

    async def close(self) -> None: ...


def counts_of(
    snapshot: Snapshot, plan: Body, *, at: Snapshot | None = None, level_per_s: float | None = None
) -> Counts:
    """The snapshot as the analysis wants it: positions in nm on the bench's scale, sorted, times in s.

    With `at`, on that later snapshot's positions; one not visited yet has no gate time. level_per_s : the
    reference's rate that is an exposure of 1; None: its mean over the snapshot.
    """
    return _reduced(snapshot, plan, at, level_per_s).counts


def _reduced(snapshot: Snapshot, plan: Body, at: Snapshot | None, level_per_s: float | None) -> Reduced:
    return reduce(
        _sums(snapshot, plan, at),
        detector=detector_law(plan),
        reference=reference_law(plan),
        reference_level_per_s=level_per_s,
    )


def _sums(snapshot: Snapshot, plan: Body, at: Snapshot | None) -> Sums:
    places = np.array(snapshot.rows if at is None else at.rows, dtype=np.int64).reshape(-1, 5)
    if at is None:
        sums = places[:, 2:]
    else:
        known = {row[:2]: row[2:] for row in snapshot.rows}
        sums = np.array([known.get(row[:2], (0, 0, 0)) for row in at.rows], dtype=np.int64).reshape(-1, 3)
    wavelength_nm = mount_of(plan).wavelength_nm(places[:, 0])
    order = np.argsort(wavelength_nm, kind="stable")
    return Sums(
        wavelength_nm=wavelength_nm[order],
        group=places[order, 1],
        counts=sums[order, 0],
        gate_s=sums[order, 1] * 1e-9,
        dark_counts=snapshot.dark_counts,
        dark_gate_s=snapshot.dark_gate_ns * 1e-9,
        reference_counts=None if plan["reference"] is None else sums[order, 2],
    )


def answer(head: Body, request: StartLook) -> dict[str, Any]:
    """One look, cold: a pure function of the head, the counts and the last look's record."""
    plan, now = head["plan"], request.now

    law = reference_law(plan)
    level_per_s = None if law is None else reference_level_per_s(_sums(now, plan, None), law)

    def earlier(snapshot: Snapshot | None) -> Counts | None:
        if snapshot is None:
            return None
        return counts_of(snapshot, plan, at=now, level_per_s=level_per_s)

    reduced = _reduced(now, plan, None, level_per_s)
    evidence = Evidence(
        now=reduced.counts,
        swept=earlier(request.swept),
        previous=earlier(request.previous),
        first=earlier(request.first),
    )
    previous = None if request.previous_look is None else from_json(Look, request.previous_look)
    made = look(evidence, from_json(Question, head["question"]), previous)
    flags = (*made.flags, *(flag for flag in reduced.flags if flag not in made.flags))
    result: dict[str, Any] = to_json(replace(made, flags=flags))
    return result


class InlineLooker:
    """On the caller's thread: what virtual time needs."""

    def __init__(self, head: Body) -> None:
        self._head = head

    async def look(self, request: StartLook) -> dict[str, Any]:
        return answer(self._head, request)

    async def close(self) -> None:
        """Nothing to release."""


class ProcessLooker:
    """In a child process that answers one JSON line with another; started anew if it dies."""

    def __init__(self, head: Body) -> None:
        self._head = json.dumps({"plan": head["plan"], "question": head["question"]})
        self._worker: asyncio.subprocess.Process | None = None
        self._one_at_a_time = asyncio.Lock()

    async def look(self, request: StartLook) -> dict[str, Any]:
        line = json.dumps(_request_to_json(request)).encode() + b"\n"
        async with self._one_at_a_time:
            for _attempt in range(2):
                reply = await self._exchange(line)
                if reply is not None:
                    if "error" in reply:
                        raise LookError(f"analysis: {reply['error']}")
                    look: dict[str, Any] = reply["look"]
                    return look
        raise LookError("analysis: the worker process died twice on the same look")

    async def _exchange(self, line: bytes) -> dict[str, Any] | None:
        try:
            if self._worker is None:
                self._worker = await asyncio.create_subprocess_exec(
                    *(sys.executable, "-P", "-m", "daq.looks"),
                    stdin=asyncio.subprocess.PIPE,
                    stdout=asyncio.subprocess.PIPE,
                    limit=LARGEST_LINE_BYTES,
                    start_new_session=True,  # Ctrl-C is for the daemon, not for its worker
                )
                self._worker.stdin.write(self._head.encode() + b"\n")  # type: ignore[union-attr]
            worker = self._worker
            assert worker.stdin is not None
            assert worker.stdout is not None
            worker.stdin.write(line)
            async with asyncio.timeout(LONGEST_LOOK_S):
                await worker.stdin.drain()
                reply = await worker.stdout.readline()
        except OSError:  # TimeoutError is one: a worker that hangs is as good as dead
            reply = b""
        if not reply.endswith(b"\n"):
            await self.close()
            return None
        decoded: dict[str, Any] = json.loads(reply)
        return decoded

    async def close(self) -> None:
        worker, self._worker = self._worker, None
        if worker is not None:
            with contextlib.suppress(ProcessLookupError):
                worker.kill()
            await worker.wait()
            if worker.stdin is not None:
                worker.stdin.close()


def _request_to_json(request: StartLook) -> dict[str, Any]:
    def plain(snapshot: Snapshot | None) -> dict[str, Any] | None:
        return None if snapshot is None else snapshot.to_json()

    return {
        "horizon": request.horizon,
        "now": request.now.to_json(),
        "swept": request.swept.to_json(),
        "previous": plain(request.previous),
        "first": plain(request.first),
        "previous_look": request.previous_look,
        "final": request.final,
    }


def _request_from_json(plain: Body) -> StartLook:
    def snapshot(key: str) -> Snapshot | None:
        return None if plain[key] is None else Snapshot.from_json(plain[key])

    return StartLook(
        horizon=plain["horizon"],
        now=Snapshot.from_json(plain["now"]),
        swept=Snapshot.from_json(plain["swept"]),
        previous=snapshot("previous"),
        first=snapshot("first"),
        previous_look=plain["previous_look"],
        final=plain["final"],
    )


def _serve() -> None:
    head = json.loads(sys.stdin.readline())
    for line in sys.stdin:
        try:
            reply: dict[str, Any] = {"look": answer(head, _request_from_json(json.loads(line)))}
        except Exception as error:
            reply = {"error": f"{type(error).__name__}: {error}"}
        try:
            sys.stdout.write(json.dumps(reply, allow_nan=False) + "\n")
            sys.stdout.flush()
        except BrokenPipeError:  # the daemon is gone, nobody waits for the answer
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return


if __name__ == "__main__":
    from daq import guard

    guard.check()
    _serve()
