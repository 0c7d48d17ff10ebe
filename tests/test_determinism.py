"""The same seed is the same night, byte for byte; a look is the same wherever it is computed."""

from __future__ import annotations

import asyncio
import dataclasses
import hashlib
import json
from pathlib import Path
from typing import Any

import pytest
from cellar import QUICK_TARGET, run
from commandline import gratingd

from daq.looks import InlineLooker, ProcessLooker
from daq.machine import Machine, StartLook
from daq.records import Kind

SEED = 20310211


DEMO = ("demo",)
ACCEPTANCE = ("night", "emberlight-3", "acceptance")


def night(
    folder: Path, *, seed: int, hashes: str, command: tuple[str, ...] = ACCEPTANCE
) -> tuple[list[dict[str, Any]], dict[str, str]]:
    """A shipped night in a child: its JSON without the folder, and the hash of every file it left."""
    folder.mkdir()
    done = gratingd(
        *(*command, "--json", "--out", "files", "--seed", str(seed)),
        cwd=folder,
        more={"PYTHONHASHSEED": hashes},
    )
    assert done.returncode == 0, done.stderr
    runs = json.loads(done.stdout)["runs"]
    for one in runs:
        one["file"] = Path(one["file"]).name
    files = sorted(path for path in (folder / "files").iterdir() if path.name != ".gratingd.lock")
    return runs, {path.name: hashlib.sha256(path.read_bytes()).hexdigest() for path in files}


@pytest.mark.slow
def test_a_night_is_the_same_bytes_for_a_seed(tmp_path: Path) -> None:
    first = night(tmp_path / "first", seed=SEED, hashes="0")
    assert sorted(Path(name).suffix for name in first[1]) == [".h5"] * 4 + [".journal"] * 4
    assert night(tmp_path / "again", seed=SEED, hashes="0") == first
    assert night(tmp_path / "one", seed=SEED, hashes="1") == first


@pytest.mark.slow
def test_the_demo_is_the_same_bytes_for_a_seed(tmp_path: Path) -> None:
    """With all that the simple bench has not: lamps, filters, slits, orders, self-reversal."""
    first = night(tmp_path / "first", seed=SEED, hashes="0", command=DEMO)
    assert sorted(Path(name).suffix for name in first[1]) == [".h5"] * 9 + [".journal"] * 9
    assert night(tmp_path / "random", seed=SEED, hashes="random", command=DEMO) == first


@pytest.mark.slow
def test_another_seed_is_another_night(tmp_path: Path) -> None:
    runs, files = night(tmp_path / "one", seed=SEED, hashes="0")
    others, other_files = night(tmp_path / "other", seed=SEED + 1, hashes="0")
    assert set(files) == set(other_files)
    assert not set(files.values()) & set(other_files.values())
    assert [one["verdict"] for one in others] == [one["verdict"] for one in runs]
    assert all(
        one["separation_pm"] != other["separation_pm"]
        for one, other in zip(runs[:2], others[:2], strict=True)
    )


def look_requests(folder: Path) -> tuple[dict[str, Any], list[StartLook]]:
    """The head of a short run and everything the machine asked the analysis, the conclusion included."""
    outcome = run(folder, seed=SEED)
    head = outcome.records[0].body
    machine = Machine(head["plan"])
    asked: list[StartLook] = []
    for record in outcome.records[1:]:
        if record.kind == Kind.CONCLUSION:
            break
        asked += [e for e in machine.step(record.kind, record.body) if isinstance(e, StartLook)]
    assert asked[-1].final
    return head, asked


def test_a_look_is_the_same_in_a_worker_process(tmp_path: Path) -> None:
    """Under virtual time looks run inline, in real time in a child: the same numbers to the last bit."""
    head, asked = look_requests(tmp_path)
    assert len(asked) >= 3
    assert asked[-2].previous_look is not None

    async def answers(looker: InlineLooker | ProcessLooker) -> list[str]:
        try:
            return [json.dumps(await looker.look(request), sort_keys=True) for request in asked]
        finally:
            await looker.close()

    inline = asyncio.run(answers(InlineLooker(head)))
    assert asyncio.run(answers(ProcessLooker(head))) == inline
    assert len(set(inline)) == len(inline), "each look saw something else"


def test_a_look_depends_on_its_request_alone(tmp_path: Path) -> None:
    """Asked in the opposite order, and twice: nothing of an earlier look is remembered."""
    head, asked = look_requests(tmp_path)

    async def answers(requests: list[StartLook]) -> list[dict[str, Any]]:
        looker = InlineLooker(head)
        return [await looker.look(request) for request in requests]

    forward = asyncio.run(answers(asked))
    backward = asyncio.run(answers([*reversed(asked), *reversed(asked)]))
    assert backward == forward[::-1] * 2


def test_a_look_sees_a_single_count_more(tmp_path: Path) -> None:
    """The comparison above would mean nothing if looks could not tell."""
    head, asked = look_requests(tmp_path)
    request = asked[-1]
    steps, group, counts, gate_ns, reference = request.now.rows[7]
    rows = (*request.now.rows[:7], (steps, group, counts + 1, gate_ns, reference), *request.now.rows[8:])
    more = dataclasses.replace(request, now=dataclasses.replace(request.now, rows=rows))
    looker = InlineLooker(head)
    assert asyncio.run(looker.look(more)) != asyncio.run(looker.look(request))


def test_the_journal_of_a_run_does_not_depend_on_its_folder(tmp_path: Path) -> None:
    """Records hold no path of the machine but the bench file's own, as its head says."""
    records = []
    for name in ("here", "there"):
        outcome = run(tmp_path / name, seed=SEED)
        head = outcome.records[0].body
        head["bench"].pop("path")
        records.append([(r.seq, r.kind, r.body) for r in outcome.records])
    assert records[0] == records[1]
    assert records[0][0][2]["target"]["text"] == QUICK_TARGET
