"""The journal: the durable record of one run, from which everything else can be rebuilt.

One SQLite file, one table, one row a record: `rec(seq, kind, body)`, the body compact JSON. Rows are only
ever appended, numbered from 1 without a gap; row 1 is the head. Two ways of writing:

- threaded (real time): a writer thread commits whatever has queued up in one transaction (WAL,
  synchronous=FULL). `append` never waits for the disk, `durable` does.
- inline (virtual time): the caller's thread, no syncs, one transaction a 256 records. The same records give
  the same bytes, so the file itself can be compared.

After a power cut or kill -9 the next opening replays the write-ahead log; a `-wal` file belongs to its
journal and is never moved or removed alone. While a journal is open no one in the same process may open the
file by other means than SQLite: closing any descriptor of it would drop SQLite's lock (a POSIX rule).
"""

from __future__ import annotations

import asyncio
import contextlib
import fcntl
import json
import os
import queue
import sqlite3
import threading
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Any, NoReturn

from daq.records import FORMAT, KINDS, Body, Kind, Record, other_format
from drivers.errors import GratingdError

_APPLICATION_ID = 0x47525444  # "GRTD" in the SQLite header: tells a journal from any other SQLite file
_PAGE_SIZE = 4096  # stated, because the default depends on how SQLite was built
_BATCH = 256  # inline: records a transaction
_CHUNK = 1000  # reader: records a read transaction (short ones let the write-ahead log be reset)

_encoder = json.JSONEncoder(sort_keys=True, separators=(",", ":"), allow_nan=False, ensure_ascii=False)


class JournalError(GratingdError):
    """A journal cannot be written or read; the text names the file and what to do."""


def encode(body: Body) -> str:
    """Body as the journal writes it. Raises ValueError (NaN, infinity, lone surrogates) or TypeError."""
    text = _encoder.encode(dict(body))
    text.encode("utf-8")  # a lone surrogate would otherwise fail later, in the writer thread
    return text


class Journal:
    """Appends records to one journal file. Made by `create` or `open`, released by `close`."""

    def __init__(self, path: Path, database: sqlite3.Connection, last_seq: int, *, threaded: bool) -> None:
        self.path = path
        self.threaded = threaded
        self._database = database
        self._last_seq = last_seq
        self._committed_seq = last_seq
        self._failure: JournalError | None = None
        self._failure_told = False
        self._closed = False
        self._pending: list[tuple[int, str, str]] = []
        self._queue: queue.SimpleQueue[tuple[int, str, str] | None] = queue.SimpleQueue()
        self._lock = threading.Lock()  # guards _committed_seq, _failure and _waiters
        self._waiters: list[tuple[int, asyncio.AbstractEventLoop, asyncio.Future[None]]] = []
        self._writer: threading.Thread | None = None
        if threaded:
            self._writer = threading.Thread(target=self._write, name=f"journal {path.name}", daemon=True)
            self._writer.start()

    @classmethod
    def create(cls, path: str | os.PathLike[str], head: Body, *, threaded: bool) -> Journal:
        """Make a new journal whose record 1 is `head`; the head is committed when this returns.

        Raises JournalError if the file exists or cannot be written.
        """
        path = Path(path)
        if path.exists():
            raise JournalError(f"{path}: exists already; a journal is never overwritten")
        body = _encoded(path, "head", head)
        try:
            with _guarded(sqlite3.connect(path, isolation_level=None, check_same_thread=False)) as database:
                database.execute(f"PRAGMA page_size={_PAGE_SIZE}")
                database.execute(f"PRAGMA synchronous={'FULL' if threaded else 'OFF'}")
                # Identity, table and head in one transaction: a journal has all of them or nothing. They are
                # written before there is a write-ahead log, so that a copy without it still says what it is.
                database.execute("BEGIN IMMEDIATE")
                database.execute(f"PRAGMA application_id={_APPLICATION_ID}")
                database.execute(
                    "CREATE TABLE rec(seq INTEGER PRIMARY KEY, kind TEXT NOT NULL, body TEXT NOT NULL)"
                )
                database.execute("INSERT INTO rec VALUES (1, 'head', ?)", (body,))
                database.execute("COMMIT")
                _configure(database, threaded)
        except sqlite3.Error as error:
            _raise_write(path, error)
        if threaded:
            fsync_folder(path.parent)
        return cls(path, database, 1, threaded=threaded)

    @classmethod
    def open(cls, path: str | os.PathLike[str], *, threaded: bool) -> Journal:
        """Open an existing journal to append to it; a write-ahead log left by a crash is replayed.

        Raises JournalError if the file is missing, damaged, of a newer format, or not a journal.
        """
        path = Path(path)
        database = _connect_existing(path)
        try:
            with _guarded(database):
                _check_head(path, database)
                count, last = database.execute("SELECT count(*), max(seq) FROM rec").fetchone()
                if count != last:
                    _raise_damaged(path, f"{count} records, but the last one is number {last}")
                _configure(database, threaded)
        except sqlite3.Error as error:
            _raise_damaged(path, str(error))
        return cls(path, database, int(last), threaded=threaded)

    @property
    def last_seq(self) -> int:
        """Number of the newest record appended (committed or not)."""
        return self._last_seq

    @property
    def committed_seq(self) -> int:
        """Number of the newest record that is safely in the file."""
        return self._committed_seq

    def append(self, kind: str, body: Body) -> int:
        """Append one record and return its number; it is on the disk when `durable(number)` returns.

        Raises JournalError if an earlier record could not be written, if the kind is unknown or if the body
        has no JSON (NaN, infinity).
        """
        if self._closed:
            raise JournalError(f"{self.path}: is closed; nothing more can be appended")
        self._raise_failure()
        if kind not in KINDS or kind == Kind.HEAD:
            raise JournalError(
                f"{self.path}: a record of kind {kind!r} cannot be appended; allowed: {_allowed()}"
            )
        row = (self._last_seq + 1, str(kind), _encoded(self.path, kind, body))
        self._last_seq = row[0]
        if self._writer is not None:
            self._queue.put(row)
        else:
            self._pending.append(row)
            if len(self._pending) >= _BATCH:
                self.flush()
        return row[0]

    async def durable(self, seq: int) -> None:
        """Wait until record `seq` is committed (inline: at once). Raises JournalError if it never will be."""
        if not 1 <= seq <= self._last_seq:
            raise ValueError(f"seq must be 1..{self._last_seq}, not {seq}")
        if self._writer is None:
            self._raise_failure()
            return
        loop = asyncio.get_running_loop()
        with self._lock:
            if seq <= self._committed_seq:
                return
            self._raise_failure()
            waiter = loop.create_future()
            self._waiters.append((seq, loop, waiter))
        await waiter

    def flush(self) -> None:
        """Inline: commit what is pending. Threaded: nothing, the writer never holds anything back."""
        rows, self._pending = self._pending, []
        if rows:
            self._commit(rows)
            self._raise_failure()

    def close(self) -> None:
        """Commit everything and release the file; any number of times.

        Leaves one file without a write-ahead log, unless somebody is reading it at this moment. Raises
        JournalError if records could not be written and nobody has been told yet.
        """
        if self._closed:
            return
        self._closed = True
        if self._writer is not None:
            self._queue.put(None)
            self._writer.join()
        elif self._pending and self._failure is None:
            self._commit(self._pending)
        if self._failure is None:
            with contextlib.suppress(sqlite3.OperationalError):  # a reader: the log stays, nothing is lost
                self._database.execute("PRAGMA busy_timeout=200")
                self._database.execute("PRAGMA journal_mode=DELETE").fetchone()
        with contextlib.suppress(sqlite3.Error):
            self._database.close()
        if not self._failure_told:
            self._raise_failure()

    def __enter__(self) -> Journal:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _raise_failure(self) -> None:
        if self._failure is not None:
            self._failure_told = True
            raise JournalError(str(self._failure)) from self._failure

    def _commit(self, rows: list[tuple[int, str, str]]) -> None:
        """One transaction. A failure is kept: from then on nothing is written, for a gap would be a lie."""
        try:
            self._database.execute("BEGIN IMMEDIATE")
            self._database.executemany("INSERT INTO rec VALUES (?, ?, ?)", rows)
            self._database.execute("COMMIT")
        except Exception as error:  # whatever it was: it may end in a thread, where nobody would see it
            with contextlib.suppress(sqlite3.Error):
                self._database.execute("ROLLBACK")
            failure = JournalError(_write_text(self.path, error, rows[0][0]))
            failure.__cause__ = error
            with self._lock:
                self._failure = failure
        else:
            with self._lock:
                self._committed_seq = rows[-1][0]

    def _write(self) -> None:
        """The writer thread: everything that has queued up goes into one transaction."""
        ending = False
        while not ending:
            rows: list[tuple[int, str, str]] = []
            item = self._queue.get()
            while item is not None:
                rows.append(item)
                if self._queue.empty():
                    break
                item = self._queue.get()
            ending = item is None
            if rows and self._failure is None:
                self._commit(rows)
            self._tell_waiters()

    def _tell_waiters(self) -> None:
        with self._lock:
            failure = self._failure
            ready = [w for w in self._waiters if failure is not None or w[0] <= self._committed_seq]
            self._waiters = [w for w in self._waiters if w not in ready] if ready else self._waiters
        for seq, loop, waiter in ready:
            error = failure if seq > self._committed_seq else None
            with contextlib.suppress(RuntimeError):  # the loop is closed: nobody waits any more
                loop.call_soon_threadsafe(self._settle, waiter, error)

    def _settle(self, waiter: asyncio.Future[None], error: JournalError | None) -> None:
        if waiter.done():  # cancelled while the disk was writing
            return
        if error is None:
            waiter.set_result(None)
        else:
            self._failure_told = True
            waiter.set_exception(JournalError(str(error)))


def read_journal(path: str | os.PathLike[str], *, last_seq: int | None = None) -> Iterator[Record]:
    """Records in order, decoded as they are read; legal beside a writer in this or another process.

    Each thousand records are a read transaction of their own. Ends with record `last_seq` if given, otherwise
    with the newest one found. Raises JournalError if the file is missing, not a journal, damaged, of a newer
    format, or if a record is missing, of unknown kind or not JSON; records before the damage are yielded.
    """
    path = Path(path)
    for seq, kind, text in read_rows(path, last_seq=last_seq):
        yield Record(seq, kind, decode(path, seq, kind, text))


def read_rows(path: str | os.PathLike[str], *, last_seq: int | None = None) -> Iterator[tuple[int, str, str]]:
    """As `read_journal`, but the bodies stay as they are written: (seq, kind, JSON text)."""
    path = Path(path)
    database = _connect_existing(path)
    try:
        with contextlib.closing(database):
            _check_head(path, database)
            next_seq = 1
            while last_seq is None or next_seq <= last_seq:
                end = next_seq + _CHUNK if last_seq is None else min(next_seq + _CHUNK, last_seq + 1)
                rows = database.execute(
                    "SELECT seq, kind, body FROM rec WHERE seq >= ? AND seq < ? ORDER BY seq", (next_seq, end)
                ).fetchall()
                for seq, kind, text in rows:
                    if seq != next_seq:
                        _raise_damaged(path, f"record {next_seq} is missing")
                    yield seq, kind, text
                    next_seq += 1
                if next_seq < end:
                    _check_end(path, database, next_seq, last_seq)
                    return
    except sqlite3.Error as error:
        _raise_damaged(path, str(error))


def newest_seq(path: str | os.PathLike[str]) -> int:
    """Number of the newest committed record: the horizon of whoever reads a journal that still grows."""
    path = Path(path)
    try:
        with contextlib.closing(_connect_existing(path)) as database:
            _check_head(path, database)
            return int(database.execute("SELECT max(seq) FROM rec").fetchone()[0])
    except sqlite3.Error as error:
        _raise_damaged(path, str(error))


def is_journal(path: Path) -> bool:
    """Whether a file is one by its ending or by SQLite's header; for files that nobody here has open."""
    if not path.is_file():
        return False
    if path.suffix == ".journal":
        return True
    try:
        with path.open("rb") as stream:
            header = stream.read(72)
    except OSError:
        return False
    # https://www.sqlite.org/fileformat.html, section 1.3: the application id stands at byte 68, big-endian
    return header.startswith(b"SQLite format 3\0") and header[68:] == _APPLICATION_ID.to_bytes(4, "big")


class FolderLock:
    """Only one gratingd at a time works in a data folder: a lock on `.gratingd.lock` in it.

    The kernel releases it when the process ends, however it ends; the file stays. It is another file than any
    journal because closing a descriptor of a journal would drop SQLite's own lock.
    """

    def __init__(self, folder: str | os.PathLike[str]) -> None:
        self.folder = Path(folder)
        self._descriptor: int | None = None

    def acquire(self) -> None:
        """Raises JournalError naming the holder if the folder is in use or cannot be written."""
        file = self.folder / ".gratingd.lock"
        try:
            descriptor = os.open(file, os.O_RDWR | os.O_CREAT, 0o644)
        except OSError as error:
            raise JournalError(f"{file}: {error.strerror}; choose a folder that can be written") from error
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            holder = os.read(descriptor, 32).decode("ascii", "replace").strip() or "unknown"
            os.close(descriptor)
            raise JournalError(
                f"{self.folder}: another gratingd (process {holder}) works in this folder; "
                "wait until it has ended or choose another folder"
            ) from error
        os.ftruncate(descriptor, 0)
        os.write(descriptor, f"{os.getpid()}\n".encode("ascii"))
        self._descriptor = descriptor

    def release(self) -> None:
        """Legal any number of times."""
        if self._descriptor is not None:
            os.ftruncate(self._descriptor, 0)
            os.close(self._descriptor)
            self._descriptor = None

    def __enter__(self) -> FolderLock:
        self.acquire()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.release()


def fsync_folder(folder: Path) -> None:
    """Make names in `folder` durable (a new or renamed file is lost without this)."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


@contextlib.contextmanager
def _guarded(database: sqlite3.Connection) -> Iterator[sqlite3.Connection]:
    """Closes the connection only if something goes wrong."""
    try:
        yield database
    except BaseException:
        database.close()
        raise


def _configure(database: sqlite3.Connection, threaded: bool) -> None:
    # inline keeps SQLite's rollback journal: without it a killed process would leave a torn file
    database.execute(f"PRAGMA journal_mode={'WAL' if threaded else 'DELETE'}").fetchone()
    database.execute(f"PRAGMA synchronous={'FULL' if threaded else 'OFF'}")


def _connect_existing(path: Path) -> sqlite3.Connection:
    if path.is_dir():
        raise JournalError(f"{path}: is a directory; name the journal file in it")
    if not path.exists():
        raise JournalError(f"{path}: no such journal")
    _check_not_empty(path)
    try:
        # mode=rw: replays a write-ahead log if there is one, but never makes an empty file
        return sqlite3.connect(
            f"{path.absolute().as_uri()}?mode=rw",
            uri=True,
            isolation_level=None,
            check_same_thread=False,
            timeout=30.0,
        )
    except sqlite3.Error as error:
        raise JournalError(
            f"{path}: cannot be opened ({error}); check that you may read and write it"
        ) from error


def _check_not_empty(path: Path) -> None:
    """Before SQLite sees it: beside an empty file it would delete a write-ahead log as left over."""
    if path.stat().st_size > 0:
        return
    log = path.with_name(f"{path.name}-wal")
    if log.exists():
        raise JournalError(
            f"{path}: is empty, but {log.name} beside it may hold its records; keep both, and restore the "
            "journal from a copy"
        )
    raise JournalError(
        f"{path}: is empty: gratingd was killed before its first record, or the file was cut to nothing when "
        "it was copied; without another copy of it there is nothing to recover"
    )


def _check_head(path: Path, database: sqlite3.Connection) -> None:
    (application,) = database.execute("PRAGMA application_id").fetchone()
    (tables,) = database.execute(
        "SELECT count(*) FROM sqlite_master WHERE type='table' AND name='rec'"
    ).fetchone()
    _check_not_empty(path)  # creation broken off and rolled back just now
    if application != _APPLICATION_ID:
        raise JournalError(f"{path}: is not a gratingd journal but another program's SQLite file")
    if not tables:
        raise JournalError(
            f"{path}: holds no records; most likely it was copied or moved without '{path.name}-wal', where "
            "they are: put that file beside it again and keep the two together"
        )
    row = database.execute("SELECT kind, body FROM rec WHERE seq=1").fetchone()
    if row is None or row[0] != "head":
        _raise_damaged(path, "record 1 is no head")
    found = decode(path, 1, *row).get("format")
    if isinstance(found, int) and found != FORMAT and found > 0:
        raise JournalError(f"{path}: {other_format(found)}")
    if found != FORMAT:
        _raise_damaged(path, f"the head's format is {found!r}, not {FORMAT}")


def _check_end(path: Path, database: sqlite3.Connection, next_seq: int, last_seq: int | None) -> None:
    """A gap at a chunk's end looks like the end of the journal: see whether something stands behind it."""
    (beyond,) = database.execute("SELECT min(seq) FROM rec WHERE seq >= ?", (next_seq,)).fetchone()
    if last_seq is not None or (beyond is not None and beyond > next_seq):
        _raise_damaged(path, f"record {next_seq} is missing")


def _encoded(path: Path, kind: str, body: Body) -> str:
    try:
        return encode(body)
    except (TypeError, ValueError) as error:
        raise JournalError(f"{path}: a record of kind {kind!r} cannot be written as JSON: {error}") from error


def _refuse_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is not JSON")


_decoder = json.JSONDecoder(parse_constant=_refuse_constant)


def decode(path: Path, seq: int, kind: str, text: str) -> dict[str, Any]:
    """Body of one row of `read_rows`. Raises JournalError: unknown kind, or not a JSON object."""
    if kind not in KINDS or (kind == Kind.HEAD) != (seq == 1):
        raise JournalError(
            f"{path}: record {seq} is of kind {kind!r}, which cannot stand there; allowed: {_allowed()}; "
            "the journal is damaged or written by a newer gratingd"
        )
    try:
        body = _decoder.decode(text)
    except (TypeError, ValueError) as error:
        _raise_damaged(path, f"record {seq} ({kind}) is not JSON: {error}")
    if not isinstance(body, dict):
        _raise_damaged(path, f"record {seq} ({kind}) is not a JSON object")
    return body


def _allowed() -> str:
    return ", ".join(sorted(KINDS - {Kind.HEAD})) + " (head: record 1 only)"


def _raise_damaged(path: Path, what: str) -> NoReturn:
    raise JournalError(
        f"{path}: damaged, or not a gratingd journal: {what}; "
        "keep it together with its '-wal' file if there is one, and restore both from a copy"
    )


def _write_text(path: Path, error: Exception, seq: int) -> str:
    return (
        f"{path}: record {seq} could not be written ({error}); everything before it is safe: "
        f"make room on the disk or check it, then run 'gratingd recover {path.parent}'"
    )


def _raise_write(path: Path, error: sqlite3.Error) -> NoReturn:
    raise JournalError(
        f"{path}: cannot be made ({error}); check that the folder exists, can be written and has room"
    ) from error
