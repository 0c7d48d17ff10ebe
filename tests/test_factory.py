"""A lab's own drivers: what a factory returns is looked at, what fails is told; the manual's drive works."""

from __future__ import annotations

import re
import signal
import socketserver
import sys
import threading
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from cellar import bench_file, target_file
from commandline import ROOT, complaint, gratingd, start

from daq.cli import Exit
from daq.journal import read_journal
from daq.records import Kind, Record
from drivers.clock import RealClock
from drivers.errors import DataError, LinkError, SettingsError
from drivers.factory import PROTOCOLS, load_object, make
from drivers.protocols import DriverContext

GOOD = {
    "drive": """
class Device:
    async def identify(self, *, deadline_s): ...
    async def close(self): ...
    async def home(self, *, deadline_s): ...
    async def move_to(self, steps, *, deadline_s): ...
    async def halt(self): ...
""",
    "detector": """
class Device:
    async def identify(self, *, deadline_s): ...
    async def close(self): ...
    async def gate(self, gate_ns, *, deadline_s, quietly=False): ...
""",
    "shutter": """
class Device:
    async def identify(self, *, deadline_s=5.0): ...
    async def close(self): ...
    async def set_open(self, is_open, *, deadline_s): ...
""",
    "ambient": """
class Device:
    async def identify(self, **given): ...
    async def close(self): ...
    async def read(self, *, deadline_s): ...
""",
}
FACTORY = """
def open_it(options, context):
    return Device()
"""


@pytest.fixture
def made(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Callable[[str, str], Any]]:
    """What `make` makes of a driver module with the given text, for the given role."""
    monkeypatch.syspath_prepend(str(tmp_path))

    def make_of(text: str, role: str) -> Any:
        (tmp_path / "lab_made.py").write_text(text, encoding="utf-8")
        factory = load_object("lab_made:open_it", "b.toml", f"{role}.factory")
        context = DriverContext(clock=RealClock(), role=role, seed=1, folder=str(tmp_path))
        return make(factory, {"port": 1}, context, "b.toml", PROTOCOLS.get(role))

    yield make_of
    sys.modules.pop("lab_made", None)


@pytest.mark.parametrize("role", GOOD)
def test_a_device_with_the_methods_of_its_protocol_is_taken(made: Callable[..., Any], role: str) -> None:
    assert type(made(GOOD[role] + FACTORY, role)).__name__ == "Device"


def test_a_world_may_be_anything(made: Callable[..., Any]) -> None:
    assert made("def open_it(options, context):\n    return options\n", "world") == {"port": 1}


@pytest.mark.parametrize(
    ("role", "old", "new", "told"),
    [
        ("drive", "async def halt(self): ...", "", ["has no method halt()"]),
        ("drive", "move_to", "goto", ["has no method move_to(steps, *, deadline_s)"]),
        ("drive", "async def halt", "def halt", ["has a halt that is not written with 'async def'"]),
        (
            "drive",
            "move_to(self, steps, *, deadline_s)",
            "move_to(self, steps)",
            ["has a move_to that cannot be called as move_to(steps, *, deadline_s)"],
        ),
        (
            "drive",
            "home(self, *, deadline_s)",
            "home(self, speed, *, deadline_s)",
            ["has a home that cannot be called as home(*, deadline_s)"],
        ),
        ("drive", "async def home(self, *, deadline_s): ...", "home = 3", ["has no method home(*, dead"]),
        (
            "drive",
            "async def",
            "def",
            [f"has a {name} that is not" for name in ("close", "halt", "home", "identify", "move_to")],
        ),
        ("detector", "gate(", "count(", ["has no method gate(gate_ns, *, deadline_s)"]),
        ("shutter", "set_open(", "open(", ["has no method set_open(is_open, *, deadline_s)"]),
        ("ambient", "read(", "reading(", ["has no method read(*, deadline_s)"]),
        ("ambient", "async def close(self): ...", "", ["has no method close()"]),
    ],
)
def test_what_a_device_lacks_is_told_all_at_once(
    made: Callable[..., Any], role: str, old: str, new: str, told: list[str]
) -> None:
    assert old in GOOD[role]
    with pytest.raises(SettingsError) as caught:
        made(GOOD[role].replace(old, new) + FACTORY, role)
    head = f"{role}.factory: what the factory lab_made:open_it returned (Device) "
    assert len(caught.value.problems) == len(told)
    for problem, words in zip(caught.value.problems, told, strict=True):
        assert problem.startswith(head + words)
    assert str(caught.value).startswith("b.toml: ")


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("def open_it(options, context):\n    Device()\n", "returned is None; end the factory with"),
        ("async def open_it(options, context):\n    return Device()\n", "returned is a coroutine; write"),
        (
            "def open_it(options):\n    return Device()\n",
            "lab_made:open_it failed: TypeError: open_it() takes 1 positional argument but 2 were given",
        ),
        (
            "def open_it(options, context):\n    return {}['no such port']\n",
            "lab_made:open_it failed: KeyError: 'no such port' (lab_made.py, line 10)",
        ),
        (
            "def open_it(options, context):\n    raise RuntimeError('two\\nlines')\n",
            "lab_made:open_it failed: RuntimeError: two lines (lab_made.py, line 10)",
        ),
    ],
)
def test_a_factory_that_fails_is_told_as_such(made: Callable[..., Any], text: str, told: str) -> None:
    with pytest.raises(SettingsError) as caught:
        made(GOOD["drive"] + "\n" + text, "drive")
    (problem,) = caught.value.problems
    assert problem.startswith("drive.factory: ")
    assert told in problem


@pytest.mark.parametrize("error", ["LinkError('drive', 'no carrier')", "DataError('lamp.csv: is empty')"])
def test_errors_with_a_meaning_of_their_own_pass(made: Callable[..., Any], error: str) -> None:
    text = f"from drivers.errors import *\ndef open_it(options, context):\n    raise {error}\n"
    with pytest.raises((LinkError, DataError), match=r"no carrier|is empty"):
        made(text, "drive")


def test_a_bad_driver_is_told_on_the_command_line_and_nothing_is_measured(tmp_path: Path) -> None:
    (tmp_path / "mine").mkdir()
    driver = tmp_path / "mine" / "lab_shutter.py"
    bench_file(
        tmp_path,
        changes=[("simulators.memory:shutter", "lab_shutter:open_it")],
        faults='\n[paths]\ndrivers = ["mine"]\n',
    )
    target_file(tmp_path)
    for text, said in [
        (GOOD["shutter"].replace("set_open", "set") + FACTORY, "(Device) has no method set_open(is_open, *"),
        ("def open_it(options, context):\n    1 / 0\n", "failed: ZeroDivisionError: division by zero"),
    ]:
        driver.write_text(text)
        done = gratingd("measure", "bench.toml", "target.toml", "--confirm", cwd=tmp_path)
        told = complaint(done, Exit.MISTAKE)
        (line,) = told.splitlines()
        assert line.startswith(f"gratingd: {tmp_path / 'bench.toml'}: shutter.factory: ")
        assert "the factory lab_shutter:open_it" in line
        assert said in line
        assert not list(tmp_path.glob("runs/*.journal"))


# ---- the drive of the manual ----------------------------------------------------------------------------

MANUAL = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
(SECTION,) = re.findall(r"^## Adding a driver\n(.*?)^## ", MANUAL, re.DOTALL | re.MULTILINE)
(SKELETON,) = re.findall(r"```python\n(.*?)```", SECTION, re.DOTALL)
TABLES, LIMITS = re.findall(r"```toml\n(.*?)```", SECTION, re.DOTALL)

POLLS_A_MOVE = 2


class Controller(socketserver.ThreadingTCPServer):
    """The motor controller that the manual's drive speaks to. Its motions last a number of polls."""

    allow_reuse_address = True
    daemon_threads = True

    def __init__(self, script: Callable[[Controller, str], str | None]) -> None:
        super().__init__(("127.0.0.1", 0), Conversation)
        self.script = script
        self.heard: list[str] = []
        self.position = 17
        self.polls_left = 0
        self.is_stuck = threading.Event()

    @property
    def port(self) -> int:
        return int(self.server_address[1])

    def reply(self, command: str) -> str:
        word, _, value = command.partition(" ")
        match word:
            case "*IDN?":
                return "Bellwether Motion,Ratchet 2,BM-0044,1.7"
            case "HOME" | "MOVE":
                self.position = int(value or 0)
                self.polls_left = POLLS_A_MOVE
                return "OK"
            case "BUSY?":
                self.polls_left -= not self.is_stuck.is_set()
                return "1" if self.polls_left > 0 else "0"
            case "POS?":
                return str(self.position)
            case "STOP":
                self.is_stuck.clear()
                self.polls_left = 0
                return "OK"
        return "ERR what"


class Conversation(socketserver.StreamRequestHandler):
    def handle(self) -> None:
        controller = self.server
        assert isinstance(controller, Controller)
        for line in self.rfile:
            command = line.decode("ascii").strip()
            controller.heard.append(command)
            said = controller.script(controller, command)
            if said == "hang up":
                return
            self.wfile.write(f"{said or controller.reply(command)}\n".encode("ascii"))


def obedient(controller: Controller, command: str) -> str | None:
    return None


@pytest.fixture
def controller() -> Iterator[Controller]:
    with Controller(obedient) as server:
        thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.01})
        thread.start()
        yield server
        server.shutdown()
        thread.join()


TARGET = f"""
format = 1
name = "Trial"
wavelength_air_nm = 313.155
[window]
half_width_fwhm = 2.5
[sweep]
dwell_s = 0.004
[goal]
separation_uncertainty_pm = 0.001
{LIMITS.replace("60.0", "2.0")}
"""


def lay_out(folder: Path, port: int) -> None:
    """As the manual has it: the demo bench with the manual's tables, the drive beside it, a short target."""
    text = bench_file(folder).text
    (before, after) = re.fullmatch(r"(.*)^\[drive\]\n.*?(^\[detector\]\n.*)", text, re.S | re.M).groups()  # type: ignore[union-attr]
    tables = TABLES.replace("192.0.2.7", "127.0.0.1").replace("4001", str(port))
    assert tables != TABLES
    (place,) = re.findall(r'drivers = \["(\w+)"\]', tables)
    (module,) = re.findall(r'factory = "(\w+):', tables)
    (folder / place).mkdir()
    (folder / place / f"{module}.py").write_text(SKELETON, encoding="utf-8")
    (folder / "bench.toml").write_text(f"{before}{tables}\n{after}", encoding="utf-8")
    target_file(folder, TARGET)


def records_of(folder: Path) -> list[Record]:
    (journal,) = folder.glob("runs/*.journal")
    return list(read_journal(journal))


def test_the_manuals_drive_runs_to_the_limit(tmp_path: Path, controller: Controller) -> None:
    lay_out(tmp_path, controller.port)
    done = gratingd("measure", "bench.toml", "target.toml", "--confirm", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    assert "ready: drive Bellwether Motion Ratchet 2" in done.stderr
    assert "time-limit" in done.stdout
    records = records_of(tmp_path)
    (prepared,) = [record.body for record in records if record.kind == Kind.PREPARED]
    assert prepared["identities"]["drive"] == {
        "maker": "Bellwether Motion",
        "model": "Ratchet 2",
        "serial": "BM-0044",
        "firmware": "1.7",
    }
    points = [record.body for record in records if record.kind == Kind.POINT]
    assert len(points) > 3
    assert {point["steps"] for point in points} <= {
        int(command.split()[1]) for command in controller.heard if command.startswith("MOVE")
    }
    assert controller.heard[-1] == "STOP"


def test_the_manuals_drive_survives_a_link_that_is_cut(tmp_path: Path, controller: Controller) -> None:
    def script(controller: Controller, command: str) -> str | None:
        asked = controller.heard.count("POS?")
        if command == "POS?" and asked == 3:
            return "hang up"
        return "what?" if command == "POS?" and asked == 6 else None

    controller.script = script
    lay_out(tmp_path, controller.port)
    done = gratingd("measure", "bench.toml", "target.toml", "--confirm", cwd=tmp_path)
    assert done.returncode == 0, done.stderr
    faults = [record.body for record in records_of(tmp_path) if record.kind == Kind.FAULT]
    assert [fault["error"] for fault in faults] == ["LinkError", "ReplyError"]
    assert controller.heard.count("HOME") == 3
    assert done.stderr.count("trying again") == 2


def test_a_fault_that_the_manuals_drive_reports_stops_the_run(tmp_path: Path, controller: Controller) -> None:
    controller.script = lambda controller, command: "ERR stalled" if command.startswith("MOVE") else None
    lay_out(tmp_path, controller.port)
    done = gratingd("measure", "bench.toml", "target.toml", "--confirm", cwd=tmp_path)
    assert done.returncode == Exit.BENCH_FAULT, done.stderr
    assert "is answered by ERR stalled" in done.stderr
    assert controller.heard[-1] == "STOP"


def test_ctrl_c_stops_the_manuals_drive_in_a_long_move(tmp_path: Path, controller: Controller) -> None:
    stuck = threading.Event()

    def script(controller: Controller, command: str) -> str | None:
        if command.startswith("MOVE") and not stuck.is_set():
            controller.is_stuck.set()
        elif command == "BUSY?" and controller.is_stuck.is_set():
            stuck.set()
        return None

    controller.script = script
    lay_out(tmp_path, controller.port)
    with start("measure", "bench.toml", "target.toml", "--confirm", cwd=tmp_path) as child:
        try:
            assert stuck.wait(60.0)
            child.send_signal(signal.SIGINT)
            _, err = child.communicate(timeout=60)
        finally:
            child.kill()
    assert child.returncode == Exit.STOPPED, err
    records = records_of(tmp_path)
    assert Kind.HALTED in [record.kind for record in records]
    (safe,) = [record.body for record in records if record.kind == Kind.SAFE]
    assert (safe["shutter"], safe["drive"], safe["problems"]) == ("closed", "stopped", [])
    assert controller.heard[-1] == "STOP"
