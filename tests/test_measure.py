"""`measure` in real time as a child process: signals, terminals, its worker killed, its file on the way."""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import pty
import re
import select
import signal
import struct
import subprocess
import termios
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import h5py
import pytest
from cellar import FAST_BENCH, bench_file, hasty_target, target_file
from commandline import start

from daq.cli import Exit
from daq.journal import read_journal
from daq.records import Kind
from daq.runfile import read_run

TARGET = hasty_target(separation_uncertainty_pm=0.05, time_s=60.0)


@contextlib.contextmanager
def measuring(
    folder: Path, *options: str, text: str = TARGET, **more: Any
) -> Iterator[subprocess.Popen[str]]:
    """A run in the making; killed if the test leaves before it has ended."""
    bench_file(folder, changes=FAST_BENCH)
    target_file(folder, text)
    child = start("measure", "bench.toml", "target.toml", "--confirm", *options, cwd=folder, **more)
    try:
        yield child
    finally:
        if child.poll() is None:
            child.kill()
        child.wait()
        for stream in (child.stdout, child.stderr):
            if stream is not None:
                stream.close()


def wait_for_line(child: subprocess.Popen[str], words: str) -> list[str]:
    """Progress lines up to and with the first that holds `words`."""
    assert child.stderr is not None
    seen = []
    for line in child.stderr:
        seen.append(line)
        if words in line:
            return seen
    raise AssertionError(f"it ended without saying {words!r}: {''.join(seen)}")


def ended_cleanly(folder: Path, reason: str) -> list[dict[str, Any]]:
    """Journal and file whole, shutter closed before the conclusion; every record's body."""
    (journal,) = (folder / "runs").glob("*.journal")
    records = list(read_journal(journal))
    kinds = [record.kind for record in records]
    at = len(kinds) - 1 - kinds[::-1].index(Kind.SAFE)
    # the answer of a look that was under way may still come in, and nothing else
    assert set(kinds[at + 1 : -1]) <= {Kind.LOOK}
    assert kinds[-1] == Kind.CONCLUSION
    safe, conclusion = records[at].body, records[-1].body
    assert (safe["shutter"], safe["drive"], safe["problems"]) == ("closed", "stopped", [])
    assert conclusion["stop_reason"] == reason
    assert conclusion["points"] == sum(record.kind == Kind.POINT for record in records)
    file = read_run(journal.with_suffix(".h5"))
    assert file.complete
    assert list(file.records()) == records
    left = {path.name for path in (folder / "runs").iterdir()}
    assert left == {journal.name, file.path.name, ".gratingd.lock"}, "nothing half-made is left"
    return [record.body for record in records]


def size_of(path: Path) -> int:
    """0 if it is gone: SQLite's files beside a journal come and go."""
    try:
        return path.stat().st_size
    except FileNotFoundError:
        return 0


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_signal_ends_it_cleanly(number: signal.Signals, tmp_path: Path) -> None:
    with measuring(tmp_path) as child:
        wait_for_line(child, "look 2")
        child.send_signal(number)
        out, err = child.communicate(timeout=60)
    assert child.returncode == Exit.STOPPED, err
    assert f"stop asked for by {number.name}" in err
    assert "stopped-by-user" in out
    ended_cleanly(tmp_path, "stopped-by-user")


def test_signals_that_keep_coming_do_no_harm(tmp_path: Path) -> None:
    """Whoever is impatient presses Ctrl-C again, and again: also while the file is being made."""
    with measuring(tmp_path, "--json") as child:
        assert child.stdout is not None
        journals = tmp_path / "runs"
        while not any(size_of(path) > 50_000 for path in journals.glob("*.journal*")):
            assert child.poll() is None
        while not select.select([child.stdout], [], [], 0.02)[0]:
            child.send_signal(signal.SIGINT)
        out, err = child.communicate(timeout=60)
    assert child.returncode == Exit.STOPPED, err
    (run,) = json.loads(out)["runs"]
    assert run["stop_reason"] == "stopped-by-user"
    ended_cleanly(tmp_path, "stopped-by-user")


def test_the_first_moment_can_be_stopped_too(tmp_path: Path) -> None:
    with measuring(tmp_path, text=TARGET.replace("dwell_s = 0.004", "dwell_s = 1.0")) as child:
        wait_for_line(child, "ready")
        child.send_signal(signal.SIGINT)
        _, err = child.communicate(timeout=60)
    assert child.returncode == Exit.STOPPED, err
    ended_cleanly(tmp_path, "stopped-by-user")


def test_a_run_under_nohup_outlives_its_terminal(tmp_path: Path) -> None:
    with measuring(tmp_path, text=TARGET.replace("60.0", "3.0"), before=["nohup"]) as child:
        wait_for_line(child, "look 1")
        child.send_signal(signal.SIGHUP)
        _, err = child.communicate(timeout=60)
    assert child.returncode == 0, err
    ended_cleanly(tmp_path, "time-limit")


def test_plain_lines_where_there_is_no_terminal(tmp_path: Path) -> None:
    with measuring(tmp_path, text=TARGET.replace("60.0", "2.0")) as child:
        out, err = child.communicate(timeout=60)
    assert child.returncode == 0, err
    assert "\x1b" not in out + err
    lines = err.splitlines()
    assert re.fullmatch(r"\d{8}T\d{6}Z  Hasty pair: run \S+-hasty-pair-1", lines[0])
    assert re.search(r"ready: drive .+ homed at \d+ steps$", lines[1])
    assert any(re.search(r"look 1 at \d+ points: ", line) for line in lines)
    assert lines[-1].split("  ")[-1].startswith("ended (time-limit): ")
    ended_cleanly(tmp_path, "time-limit")


def children_of(pid: int) -> list[int]:
    """Its child processes, from Linux's own list."""
    return [int(child) for child in Path(f"/proc/{pid}/task/{pid}/children").read_text().split()]


def is_looker(pid: int) -> bool:
    with contextlib.suppress(OSError):
        return b"daq.looks" in Path(f"/proc/{pid}/cmdline").read_bytes()
    return False


def test_a_look_worker_that_is_killed_is_replaced(tmp_path: Path) -> None:
    with measuring(tmp_path, text=TARGET.replace("60.0", "8.0")) as child:
        wait_for_line(child, "look 1")
        (first,) = filter(is_looker, children_of(child.pid))
        os.kill(first, signal.SIGKILL)
        wait_for_line(child, "look 3")
        (second,) = filter(is_looker, children_of(child.pid))
        assert second != first
        child.send_signal(signal.SIGINT)
        _, err = child.communicate(timeout=60)
    assert child.returncode == Exit.STOPPED, err
    bodies = ended_cleanly(tmp_path, "stopped-by-user")
    assert not any(body.get("error") for body in bodies), "no fault was recorded"


@pytest.mark.slow
def test_a_file_to_look_into_appears_while_it_runs(tmp_path: Path) -> None:
    """After five seconds: any reader opens it, it is marked incomplete, the final file takes its place."""
    with measuring(tmp_path) as child:
        assert child.stdout is not None
        while not (files := list((tmp_path / "runs").glob("*.h5"))):
            assert not select.select([child.stdout], [], [], 0.05)[0], "it ended too early"
        (file,) = files
        snapshot = read_run(file)
        assert not snapshot.complete
        assert snapshot.conclusion is None
        with h5py.File(file) as opened:
            assert opened["entry/data/rate"].shape[0] > 20
        child.send_signal(signal.SIGTERM)
        _, err = child.communicate(timeout=60)
    assert child.returncode == Exit.STOPPED, err
    ended_cleanly(tmp_path, "stopped-by-user")
    points = snapshot.points["seq"].tolist()
    assert read_run(file).points["seq"].tolist()[: len(points)] == points


# ---- on a terminal --------------------------------------------------------------------------------------


class Terminal:
    """A pseudo-terminal 100 columns wide, with the user's side in our hands."""

    def __init__(self) -> None:
        self.ours, self.theirs = pty.openpty()
        fcntl.ioctl(self.theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 40, 100, 0, 0))
        self.before = termios.tcgetattr(self.theirs)
        self.screen = b""

    def read_until(self, done: Callable[[str], bool]) -> str:
        """Everything written so far, once `done` says so or the other side is closed."""
        while not done(self.screen.decode(errors="replace")):
            try:
                self.screen += os.read(self.ours, 65536)
            except OSError:  # Linux: the last holder of the other side has closed it
                break
        return self.screen.decode(errors="replace")

    def take_controlling(self) -> None:
        """In the child, before it starts: as a login shell would have it."""
        os.setsid()
        fcntl.ioctl(self.theirs, termios.TIOCSCTTY, 0)


@pytest.fixture
def terminal() -> Iterator[Terminal]:
    made = Terminal()
    yield made
    for side in (made.ours, made.theirs):
        with contextlib.suppress(OSError):
            os.close(side)


def test_the_live_display_and_ctrl_c_on_a_terminal(tmp_path: Path, terminal: Terminal) -> None:
    sides = {"stdin": terminal.theirs, "stdout": terminal.theirs, "stderr": terminal.theirs}
    with measuring(tmp_path, preexec_fn=terminal.take_controlling, **sides) as child:
        shown = terminal.read_until(lambda screen: "look 3" in screen and "time to goal" in screen)
        os.write(terminal.ours, b"\x03")  # Ctrl-C as typed: the terminal makes the signal of it
        end = terminal.read_until(lambda screen: "Files in" in screen)
        child.wait(timeout=60)
        after = termios.tcgetattr(terminal.theirs)
    assert child.returncode == Exit.STOPPED
    for name in ("doing", "last point", "spent", "estimate", "time to goal"):
        assert name in shown
    assert "measuring" in shown
    assert re.search(r"313\.\d{4} nm \(air\), \d+ counts, \d+ /s", shown)
    assert "about" in shown or "not foreseeable" in shown, "a time to the goal once there was a look"
    assert "stop asked for by SIGINT" in end
    assert after == terminal.before, "line discipline as it was"
    assert end.rfind("\x1b[?25h") >= end.rfind("\x1b[?25l"), "the cursor is shown again"
    assert "\x1b[?1049h" not in end, "no second screen: what was said stays readable"
    ended_cleanly(tmp_path, "stopped-by-user")


def test_a_terminal_that_is_closed_ends_it_cleanly(tmp_path: Path, terminal: Terminal) -> None:
    sides = {"stdin": terminal.theirs, "stdout": terminal.theirs, "stderr": terminal.theirs}
    with measuring(tmp_path, preexec_fn=terminal.take_controlling, **sides) as child:
        os.close(terminal.theirs)
        terminal.read_until(lambda screen: "look 2" in screen)
        os.close(terminal.ours)
        child.wait(timeout=60)
    ended_cleanly(tmp_path, "stopped-by-user")
