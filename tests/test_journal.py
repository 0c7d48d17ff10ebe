"""The journal: what is acknowledged is there, whatever happens to the process or the disk."""

from __future__ import annotations

import asyncio
import json
import random
import signal
import sqlite3
import subprocess
import sys
import tempfile
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.journal import FolderLock, Journal, JournalError, encode, newest_seq, read_journal
from daq.records import KINDS

ROOT = Path(__file__).resolve().parent.parent
HEAD = {"format": 2, "run_id": "20310211T180000Z-01-hg-313-1"}


def point(number: int) -> dict[str, Any]:
    return {"at_ns": number * 10**9, "counts": 3 * number, "flags": [], "light": True, "note": "µ"}


def filled(path: Path, records: int, *, threaded: bool = False) -> Path:
    with Journal.create(path, HEAD, threaded=threaded) as journal:
        for number in range(2, records + 1):
            journal.append("point", point(number))
    return path


def child(code: str, *arguments: object) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", code, *map(str, arguments)], cwd=ROOT, stdout=subprocess.PIPE, text=True
    )


json_values = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**70), 2**70)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(codec="utf-8")),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=4), inner, max_size=3),
    max_leaves=8,
)
bodies = st.lists(st.dictionaries(st.text(st.characters(codec="utf-8")), json_values, max_size=4), max_size=8)


@pytest.mark.parametrize("threaded", [False, True])
@settings(max_examples=30, deadline=None)
@given(bodies=bodies)
def test_what_goes_in_comes_out(bodies: list[dict[str, Any]], threaded: bool) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder, "run.journal")
        with Journal.create(path, HEAD, threaded=threaded) as journal:
            seqs = [journal.append("fault", body) for body in bodies]
        assert seqs == list(range(2, len(bodies) + 2))
        back = list(read_journal(path))
        assert [record.seq for record in back] == [1, *seqs]
        assert [encode(record.body) for record in back] == [encode(HEAD), *map(encode, bodies)]
        assert [p.name for p in Path(folder).iterdir()] == ["run.journal"], "one file remains"


@pytest.mark.parametrize("records", [1, 2, 256, 257, 1500])
def test_the_same_records_give_the_same_bytes_inline(tmp_path: Path, records: int) -> None:
    one, other = filled(tmp_path / "one", records), filled(tmp_path / "other", records)
    assert one.read_bytes() == other.read_bytes()
    assert newest_seq(one) == records


@pytest.mark.parametrize("first", [False, True])
def test_reopening_goes_on_counting_in_either_mode(tmp_path: Path, first: bool) -> None:
    path = filled(tmp_path / "run.journal", 5, threaded=first)
    with Journal.open(path, threaded=not first) as journal:
        assert journal.last_seq == journal.committed_seq == 5
        assert journal.append("wish", {"wish": "pause"}) == 6
    assert [record.kind for record in read_journal(path)] == ["head", *["point"] * 4, "wish"]


def test_durable_returns_once_another_connection_can_see_the_record(tmp_path: Path) -> None:
    path = tmp_path / "run.journal"

    async def main() -> None:
        with Journal.create(path, HEAD, threaded=True) as journal:
            for number in range(2, 40):
                seq = journal.append("point", point(number))
                await journal.durable(seq)
                assert newest_seq(path) >= seq
            seqs = [journal.append("point", point(number)) for number in range(40, 400)]
            await asyncio.gather(*(journal.durable(seq) for seq in reversed(seqs)))
            assert journal.committed_seq == newest_seq(path) == 399
            waiting = asyncio.ensure_future(journal.durable(journal.append("point", point(400))))
            await asyncio.sleep(0)
            waiting.cancel()
            await journal.durable(journal.append("point", point(401)))

    asyncio.run(main())
    assert [record.body for record in read_journal(path)][1:] == [point(n) for n in range(2, 402)]


def test_a_reader_beside_a_writer_sees_a_prefix_and_may_stop_anywhere(tmp_path: Path) -> None:
    path = filled(tmp_path / "run.journal", 2500)
    with Journal.open(path, threaded=True) as journal:
        seen = []
        for record in read_journal(path):
            if len(seen) % 100 == 0:
                journal.append("point", point(0))
            seen.append(record.seq)
        assert seen == list(range(1, len(seen) + 1))
        assert len(seen) >= 2500
    assert [r.seq for r in read_journal(path, last_seq=1000)] == list(range(1, 1001))


@pytest.mark.parametrize(
    ("kind", "body", "says"),
    [
        ("temperature", {}, "kind 'temperature'"),
        ("head", HEAD, "kind 'head'"),
        ("look", {"log_e_pair": float("nan")}, "JSON"),
        ("look", {"text": "\ud800"}, "JSON"),
        ("look", {"set": {1}}, "JSON"),
    ],
)
def test_what_could_not_be_read_back_is_refused(
    tmp_path: Path, kind: str, body: dict[str, Any], says: str
) -> None:
    with Journal.create(tmp_path / "run.journal", HEAD, threaded=False) as journal:
        with pytest.raises(JournalError, match=says):
            journal.append(kind, body)
        assert journal.append("point", point(2)) == 2


def test_a_journal_is_never_overwritten_nor_written_after_its_end(tmp_path: Path) -> None:
    path = filled(tmp_path / "run.journal", 3)
    with pytest.raises(JournalError, match="exists already"):
        Journal.create(path, HEAD, threaded=False)
    journal = Journal.open(path, threaded=False)
    journal.close()
    journal.close()
    with pytest.raises(JournalError, match="closed"):
        journal.append("point", point(4))
    with pytest.raises(JournalError, match="cannot be made"):
        Journal.create(tmp_path / "nowhere" / "run.journal", HEAD, threaded=True)


def damage(path: Path, statement: str) -> None:
    database = sqlite3.connect(path)
    with database:
        database.execute(statement)
    database.close()


@pytest.mark.parametrize(
    ("statement", "says"),
    [
        ("DELETE FROM rec WHERE seq=700", "record 700 is missing"),
        ("DELETE FROM rec WHERE seq=1001", "record 1001 is missing"),
        ("DELETE FROM rec WHERE seq BETWEEN 900 AND 1900", "record 900 is missing"),
        ("DELETE FROM rec WHERE seq=1", "record 1 is no head"),
        ("UPDATE rec SET kind='temperature' WHERE seq=9", "record 9 is of kind 'temperature'"),
        ("UPDATE rec SET kind='head' WHERE seq=9", "record 9 is of kind 'head'"),
        ("UPDATE rec SET body='{\"a\":' WHERE seq=9", r"record 9 \(point\) is not JSON"),
        ("UPDATE rec SET body='{\"a\":NaN}' WHERE seq=9", r"record 9 \(point\) is not JSON"),
        ("UPDATE rec SET body='[]' WHERE seq=9", r"record 9 \(point\) is not a JSON object"),
        ("UPDATE rec SET body='{\"format\":3}' WHERE seq=1", "newer gratingd: format 3, this one reads 2"),
        ("UPDATE rec SET body='{}' WHERE seq=1", "format is None"),
        ("DROP TABLE rec", "holds no records"),
        ("PRAGMA application_id=7", "not a gratingd journal"),
    ],
)
def test_damage_is_named_with_file_and_record(tmp_path: Path, statement: str, says: str) -> None:
    path = filled(tmp_path / "run.journal", 2100)
    damage(path, statement)
    with pytest.raises(JournalError, match=says) as caught:
        list(read_journal(path))
    assert str(path) in str(caught.value)


def test_other_files_are_refused_and_left_alone(tmp_path: Path) -> None:
    garbage, empty, short = tmp_path / "garbage", tmp_path / "empty", tmp_path / "short"
    garbage.write_bytes(random.Random(5).randbytes(20_000))
    empty.write_bytes(b"")
    whole = filled(tmp_path / "whole", 2000).read_bytes()
    short.write_bytes(whole[: len(whole) // 2])
    for path, says in (
        (garbage, "not a database"),
        (empty, "killed before its first record"),
        (short, "damaged"),
        (tmp_path, "directory"),
        (tmp_path / "missing", "no such journal"),
    ):
        before = path.read_bytes() if path.is_file() else None
        for action in (lambda p: list(read_journal(p)), lambda p: Journal.open(p, threaded=True)):
            with pytest.raises(JournalError, match=says):
                action(path)
        assert (path.read_bytes() if path.is_file() else None) == before
    assert not (tmp_path / "missing").exists()


def copied(path: Path, to: Path) -> Path:
    """One file alone, by another process: ours may not open a journal that it is writing."""
    subprocess.run(["cp", path, to], check=True)
    return to


def test_a_copy_without_its_log_holds_at_least_the_head(tmp_path: Path) -> None:
    """SQLite's file format, section 4.1: what is committed may stand in the -wal file alone."""
    path = tmp_path / "run.journal"
    with Journal.create(path, HEAD, threaded=True) as journal:
        first = copied(path, tmp_path / "first")
        for number in range(2, 20):
            asyncio.run(journal.durable(journal.append("point", point(number))))
        later = copied(path, tmp_path / "later")
        assert (tmp_path / "run.journal-wal").stat().st_size > 0, "or nothing is tested here"
    for copy in (first, later):
        records = list(read_journal(copy))
        assert encode(records[0].body) == encode(HEAD)
        with Journal.open(copy, threaded=True) as journal:
            assert journal.append("wish", {"wish": "stop"}) == len(records) + 1
    assert len(list(read_journal(path))) == 19


def test_a_journal_whose_records_are_all_in_a_log_that_is_missing(tmp_path: Path) -> None:
    """It is told where they are, and nobody is advised to delete anything."""
    path, log = tmp_path / "run.journal", tmp_path / "run.journal-wal"
    database = sqlite3.connect(tmp_path / "original", isolation_level=None)
    database.execute(f"PRAGMA application_id={0x47525444}")
    database.execute("PRAGMA journal_mode=WAL").fetchone()
    database.execute("CREATE TABLE rec(seq INTEGER PRIMARY KEY, kind TEXT NOT NULL, body TEXT NOT NULL)")
    database.execute("INSERT INTO rec VALUES (1, 'head', ?)", (encode(HEAD),))
    path.write_bytes((tmp_path / "original").read_bytes())
    whole = (tmp_path / "original-wal").read_bytes()
    database.close()
    assert path.stat().st_size == 4096
    with pytest.raises(JournalError, match="holds no records") as caught:
        list(read_journal(path))
    assert "put that file beside it again" in str(caught.value)
    assert f"'{log.name}'" in str(caught.value)
    assert "delete" not in str(caught.value)
    log.write_bytes(whole)
    assert [record.kind for record in read_journal(path)] == ["head"]


def test_an_empty_file_does_not_cost_the_log_beside_it(tmp_path: Path) -> None:
    """SQLite deletes the -wal file of an empty database when it opens it."""
    path, log = tmp_path / "run.journal", tmp_path / "run.journal-wal"
    path.touch()
    log.write_bytes(b"records of a night")
    for action in (lambda p: list(read_journal(p)), lambda p: Journal.open(p, threaded=True), newest_seq):
        with pytest.raises(JournalError, match=r"run\.journal-wal beside it may hold its records"):
            action(path)
    assert log.read_bytes() == b"records of a night"


MADE_AND_KILLED = """
import os, signal, sqlite3, sys
from daq import journal
class Dying(sqlite3.Connection):
    calls = 0
    def execute(self, *given):
        Dying.calls += 1
        if Dying.calls == int(sys.argv[2]):
            os.kill(os.getpid(), signal.SIGKILL)
        return super().execute(*given)
plain = sqlite3.connect
sqlite3.connect = lambda *given, **named: plain(*given, factory=Dying, **named)
journal.Journal.create(sys.argv[1], {"format": 2}, threaded=True).close()
"""


def test_killed_at_any_statement_of_its_making_it_has_a_head_or_nothing(tmp_path: Path) -> None:
    seen: list[list[str]] = []
    statement, status = 1, -int(signal.SIGKILL)
    while status == -signal.SIGKILL:
        path = tmp_path / f"{statement}.journal"
        writer = child(MADE_AND_KILLED, path, statement)
        status = writer.wait()
        assert writer.stdout is not None
        writer.stdout.close()
        try:
            seen.append([record.kind for record in read_journal(path)])
        except JournalError as error:
            told = str(error).partition(": ")[2]
            seen.append([] if told.startswith("is empty: gratingd was killed before its first") else [told])
        statement += 1
    assert status == 0
    assert seen == sorted(seen), "once it is there it stays"
    assert (seen[0], seen[-1]) == ([], ["head"])
    assert all(kinds in ([], ["head"]) for kinds in seen)


def test_the_closed_list_of_kinds_is_written_and_read(tmp_path: Path) -> None:
    kinds = sorted(KINDS - {"head"})
    with Journal.create(tmp_path / "run.journal", HEAD, threaded=False) as journal:
        for kind in kinds:
            journal.append(kind, {"at_ns": 0})
    assert [record.kind for record in read_journal(tmp_path / "run.journal")] == ["head", *kinds]


KILLED = """
import asyncio, sys
from daq.journal import Journal
async def main():
    journal = Journal.open(sys.argv[1], threaded=True)
    while True:
        seq = journal.append("point", {"at_ns": 0, "number": journal.last_seq + 1})
        if seq % 3 == 0:
            await journal.durable(seq)
            print(seq, flush=True)
asyncio.run(main())
"""


def test_kill_9_loses_nothing_that_was_acknowledged(tmp_path: Path) -> None:
    """20 kills of a real-time writer, each after a random number of acknowledgements, on one journal."""
    path = filled(tmp_path / "run.journal", 1, threaded=True)
    moments = random.Random(20310211)
    for kill in range(20):
        writer = child(KILLED, path)
        assert writer.stdout is not None
        acknowledged = 0
        for _ in range(moments.randrange(1, 60)):
            acknowledged = int(writer.stdout.readline())
        writer.send_signal(signal.SIGKILL)
        acknowledged = max([acknowledged, *map(int, writer.stdout.read().split("\n")[:-1])])
        assert writer.wait() == -signal.SIGKILL
        writer.stdout.close()
        records = list(read_journal(path))
        assert records[-1].seq >= acknowledged, f"kill {kill}"
        assert [r.body["number"] for r in records[1:]] == list(range(2, len(records) + 1))
    with Journal.open(path, threaded=True) as journal:
        assert journal.last_seq == len(records)


INLINE = """
import os, signal, sys
from daq.journal import Journal
journal = Journal.create(sys.argv[1], {"format": 2}, threaded=False)
for number in range(int(sys.argv[2])):
    journal.append("point", {"number": number})
os.kill(os.getpid(), signal.SIGKILL)
"""


@pytest.mark.parametrize(("records", "kept"), [(0, 1), (255, 1), (256, 257), (700, 513)])
def test_kill_9_inline_keeps_whole_batches(tmp_path: Path, records: int, kept: int) -> None:
    path = tmp_path / "run.journal"
    writer = child(INLINE, path, records)
    assert writer.wait() == -signal.SIGKILL
    assert writer.stdout is not None
    writer.stdout.close()
    assert len(list(read_journal(path))) == kept


FULL = """
import asyncio, resource, sys
from daq.journal import Journal, JournalError
threaded = sys.argv[2] == "True"
async def main():
    journal = Journal.create(sys.argv[1], {"format": 2}, threaded=threaded)
    resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))
    acknowledged = 1
    for place in ("append", "durable"):
        try:
            while True:
                seq = journal.append("point", {"text": "x" * 500})
                await journal.durable(seq)
                acknowledged = seq if threaded else acknowledged
        except JournalError as error:
            print(str(error))
    try:
        await journal.durable(journal.last_seq)
    except JournalError as error:
        print("durable too")
    journal.close()
    print(acknowledged)
asyncio.run(main())
"""


@pytest.mark.parametrize("threaded", [False, True])
def test_a_full_disk_is_an_error_and_what_was_acknowledged_stays(tmp_path: Path, threaded: bool) -> None:
    """A file-size limit of the process stands for the full disk."""
    path = tmp_path / "run.journal"
    writer = child(FULL, path, threaded)
    printed = writer.communicate()[0].splitlines()
    assert writer.returncode == 0
    assert len(printed) == 4
    assert all("could not be written" in line and "gratingd recover" in line for line in printed[:2])
    assert printed[2] == "durable too"
    acknowledged = int(printed[3])
    assert acknowledged > 10 or not threaded
    records = list(read_journal(path))
    assert len(records) >= acknowledged
    with Journal.open(path, threaded=threaded) as journal:
        assert journal.append("wish", {"wish": "stop"}) == len(records) + 1
    assert newest_seq(path) == len(records) + 1


def test_a_failure_nobody_waited_for_is_told_at_the_close(tmp_path: Path) -> None:
    path = tmp_path / "run.journal"
    journal = Journal.create(path, HEAD, threaded=True)
    damage(path, "ALTER TABLE rec RENAME TO other")
    journal.append("point", point(2))
    with pytest.raises(JournalError, match="record 2 could not be written"):
        journal.close()


LOCKED = """
import sys
from daq.journal import FolderLock
with FolderLock(sys.argv[1]):
    print("locked", flush=True)
    sys.stdin.read()
"""


def test_one_gratingd_a_folder(tmp_path: Path) -> None:
    holder = subprocess.Popen(
        [sys.executable, "-c", LOCKED, str(tmp_path)],
        cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
    )  # fmt: skip
    assert holder.stdout is not None
    assert holder.stdin is not None
    assert holder.stdout.readline() == "locked\n"
    with pytest.raises(JournalError, match=f"another gratingd .process {holder.pid}."):
        FolderLock(tmp_path).acquire()
    holder.kill()
    holder.wait()
    holder.stdin.close()
    holder.stdout.close()
    with FolderLock(tmp_path) as lock:
        with pytest.raises(JournalError, match="another gratingd"):
            FolderLock(tmp_path).acquire()
        lock.release()
        with FolderLock(tmp_path):
            pass
    with pytest.raises(JournalError, match="choose a folder"):
        FolderLock(tmp_path / "missing").acquire()


def test_bodies_are_compact_and_sorted() -> None:
    """The text is the record: two writers of the same body must write the same bytes."""
    assert encode({"b": [1, 2.5, None], "a": "µ"}) == '{"a":"µ","b":[1,2.5,null]}'
    assert json.loads(encode({"x": 0.1 + 0.2}))["x"] == 0.1 + 0.2
