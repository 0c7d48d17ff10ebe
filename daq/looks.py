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
from typing import Any, Protocol

import numpy as np

from analysis.counting import Counts
from analysis.question import Evidence, Look, Question, from_json, to_json
from analysis.verdict import look
from daq.machine import StartLook
from daq.plan import mount_of
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


def counts_of(snapshot: Snapshot, plan: Body, *, at: Snapshot | None = None) -> Counts:
    """The snapshot as the analysis wants it: positions in nm on the bench's scale, sorted, times in s.

    With `at`, on that later snapshot's positions; one not visited yet has no gate time.
    """
    places = np.array(snapshot.rows if at is None else at.rows, dtype=np.int64).reshape(-1, 4)
    if at is None:
        sums = places[:, 2:]
    else:
        known = {row[:2]: row[2:] for row in snapshot.rows}
        sums = np.array([known.get(row[:2], (0, 0)) for row in at.rows], dtype=np.int64).reshape(-1, 2)
    wavelength_nm = mount_of(plan).wavelength_nm(places[:, 0])
    order = np.argsort(wavelength_nm, kind="stable")
    return Counts(
        wavelength_nm=wavelength_nm[order],
        counts=sums[order, 0].astype(float),
        gate_s=sums[order, 1] * 1e-9,
        group=places[order, 1],
        sigma=None,
        dark_counts=float(snapshot.dark_counts),
        dark_gate_s=snapshot.dark_gate_ns * 1e-9,
        dead_time_s=plan["dead_time_ns"] * 1e-9,
        dead_time_u_s=plan["dead_time_uncertainty_ns"] * 1e-9,
    )


def answer(head: Body, request: StartLook) -> dict[str, Any]:
    """One look, cold: a pure function of the head, the counts and the last look's record."""
    plan, now = head["plan"], request.now

    def earlier(snapshot: Snapshot | None) -> Counts | None:
        return None if snapshot is None else counts_of(snapshot, plan, at=now)

    evidence = Evidence(
        now=counts_of(now, plan),
        swept=earlier(request.swept),
        previous=earlier(request.previous),
        first=earlier(request.first),
    )
    previous = None if request.previous_look is None else from_json(Look, request.previous_look)
    result: dict[str, Any] = to_json(look(evidence, from_json(Question, head["question"]), previous))
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
