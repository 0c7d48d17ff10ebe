"""The command line. Everything heavy is imported where it is used, so that --help answers at once."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import sys
from collections.abc import Awaitable, Callable, Iterator, Mapping, Sequence
from enum import IntEnum
from functools import partial
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any, NoReturn

import click

from drivers.errors import DataError, DeviceError, GratingdError, SettingsError

if TYPE_CHECKING:
    from asyncio import AbstractEventLoop

    from daq.carry import Outcome, Stopper
    from daq.night import NightOrder
    from daq.progress import Progress
    from drivers.clock import Clock

DEMO_BENCH, DEMO_NIGHT = "benches/emberlight-3.toml", "nights/acceptance.toml"
DEMO_FOLDER = "gratingd-demo"


class Exit(IntEnum):
    """What the exit code says."""

    DONE = 0
    MISTAKE = 2  # a command, a settings file or a data file; nothing was moved or written
    BENCH_FAULT = 3  # a run was stopped because of a device, or the bench may not be safe
    BROKE_OFF = 4  # an internal error, or a journal or file that could not be written or read
    STOPPED = 5  # somebody stopped it before it was done


EXIT_CODES = """\b
Exit codes:
  0  everything asked for was done (a limit reached is done too)
  2  a mistake in a command, a settings file or a data file
  3  a run was stopped because of a fault of the bench, or the bench may not be safe
  4  an internal error, or a journal or file that could not be written or read
  5  stopped by somebody before it was done (Ctrl-C, SIGTERM, a terminal closed)
"""


@click.group(epilog=EXIT_CODES, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="gratingd", prog_name="gratingd")
def gratingd() -> None:
    """Run a scanning grating spectrometer through the night: one line or a close pair, how far apart, how
    sure, and every point on disk."""


def json_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Print one JSON document on standard output and nothing else there."
    return click.option("--json", "as_json", is_flag=True, help=text)(command)


def out_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Folder for journals and files; made if it is not there. Default: the working folder's 'runs'."
    return click.option("--out", type=click.Path(path_type=Path), default=Path("runs"), help=text)(command)


def seed_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Seed of simulated devices; real ones ignore it."
    return click.option("--seed", type=click.IntRange(0, 2**63 - 1), default=1, show_default=True, help=text)(
        command
    )


@gratingd.command()
@click.option("--out", type=click.Path(path_type=Path), help="Folder for the files; default: a new one here.")
@seed_option
@json_option
def demo(out: Path | None, seed: int, as_json: bool) -> None:
    """A whole night in the cellar of the Emberlight Lamp Works: invented bench, simulated, virtual time.

    The same seed gives the same night, byte for byte.
    """
    from daq.files import shipped

    out = out or _new_folder(DEMO_FOLDER)
    _run_night(shipped(DEMO_BENCH), shipped(DEMO_NIGHT), out, seed, None, False, as_json)


@gratingd.command()
@click.argument("bench")
@click.argument("night", metavar="NIGHT")
@out_option
@seed_option
@click.option("--operator", help="Who answers for the night; recorded.")
@click.option("--real-time", is_flag=True, help="Wait for every gate even where the bench says virtual time.")
@json_option
def night(
    bench: str, night: str, out: Path, seed: int, operator: str | None, real_time: bool, as_json: bool
) -> None:
    """Run the targets of the file NIGHT on the bench of the file BENCH, one after another."""
    from daq.files import resolve

    with _mistakes():
        bench_path, night_path = resolve(bench, "benches"), resolve(night, "nights")
    _run_night(bench_path, night_path, out, seed, operator, real_time, as_json)


@gratingd.command()
@click.argument("bench")
@click.argument("target")
@out_option
@seed_option
@click.option("--operator", help="Who answers for the run; recorded.")
@json_option
def measure(bench: str, target: str, out: Path, seed: int, operator: str | None, as_json: bool) -> None:
    """Measure the one target of the file TARGET on the bench of the file BENCH, now, in real time.

    Ctrl-C ends it cleanly: shutter closed, everything counted so far weighed and in the file.
    """
    from daq.files import resolve
    from daq.night import NightOrder
    from daq.target import load_target
    from drivers.bench import load_bench

    with _mistakes():
        loaded = load_bench(resolve(bench, "benches"))
        targets = [load_target(resolve(target, "targets"))]
    order = NightOrder(bench=loaded, targets=targets, out=out, seed=seed, operator=operator)
    _carry_out(order, virtual=False, live=True, as_json=as_json)


@gratingd.command()
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="FILE...")
@click.option("--target", help="A target file: its line, its known lines, its model and goal.")
@click.option("--line", type=float, help="Where the main line is expected, nm on the file's scale.")
@click.option(
    "--known-line", type=float, multiple=True, help="A further line known to be there, nm; needs --line."
)
@click.option(
    "--false-alarm",
    type=click.FloatRange(0, 0.5, min_open=True, max_open=True),
    default=1e-3,
    show_default=True,
    help="How often a single line may be called a pair.",
)
@json_option
@click.pass_context
def analyse(
    context: click.Context,
    files: Sequence[Path],
    target: str | None,
    line: float | None,
    known_line: tuple[float, ...],
    false_alarm: float,
    as_json: bool,
) -> None:
    """Weigh files again: a run's HDF5 file from its own records, or a measured spectrum as CSV.

    A run file brings its own target; options other than --json are for spectra. A CSV has a header line:
    wavelength_air_nm or wavelength_vacuum_nm, counts, optionally sigma and pixel. Without sigma the counts
    are taken as Poisson.
    """
    if known_line and line is None and target is None:
        raise click.UsageError("--known-line needs --line: where the main line is expected on the same scale")
    if target is not None and (line is not None or known_line):
        raise click.UsageError("give --target or --line and --known-line, not both")
    from daq.analyse import Asked, comparison, is_run_file
    from daq.analyse import analyse as analyse_file

    given = _given(context, "target", "line", "known_line", "false_alarm")
    for file in files:
        if given and is_run_file(file):
            raise click.UsageError(
                f"{file}: a run file (HDF5) is weighed again by the target in its own records, without "
                f"{', '.join(given)}; leave that out, or give spectra (CSV) in a command of their own"
            )
    asked = Asked(line_nm=line, known_lines_nm=known_line, false_alarm=false_alarm)
    if target is not None:
        from dataclasses import replace

        from daq.files import resolve
        from daq.target import load_target

        with _mistakes():
            asked = replace(asked, target=load_target(resolve(target, "targets")))
    runs, problems = [], []
    for file in files:
        try:
            runs.append(analyse_file(file, asked))
        except DataError as error:
            problems.append(str(error))
    for problem in problems:
        click.echo(f"gratingd: {problem}", err=True)
    if runs:
        _print_runs(runs, as_json)
    for run in runs:
        if run["reproduces"] is not None and not as_json:
            click.echo(f"{run['target']}: re-analysis: {comparison(run['reproduces'])}")
    if problems:
        sys.exit(Exit.MISTAKE)


@gratingd.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--resume", is_flag=True, help="Open the bench again and carry unfinished runs on.")
@json_option
def recover(folder: Path, resume: bool, as_json: bool) -> None:
    """Make files of the journals that a crash left in FOLDER, or carry the runs on (--resume).

    Without --resume no device is touched: an unfinished run is concluded from what it has.
    """
    from daq.recover import recover as recover_folder

    progress = _progress(live=resume, as_json=as_json)

    async def work(clock: Clock, stopper: Stopper) -> Outcome:
        return await recover_folder(
            folder,
            clock,
            resume=resume,
            observe=progress.observe,
            on_run=progress.begin,
            stopper=stopper,
        )

    outcome = _with_signals(work, progress, start_utc_ns=None)
    if not outcome.runs and not outcome.problems and not as_json:
        click.echo(f"nothing to recover in {folder}")
        return
    _finish(outcome, as_json)


# ---- parts ----------------------------------------------------------------------------------------------


def _given(context: click.Context, *names: str) -> list[str]:
    """Those of the options that the user typed, as they are spelled."""
    typed = click.core.ParameterSource.COMMANDLINE
    return [f"--{name.replace('_', '-')}" for name in names if context.get_parameter_source(name) is typed]


def _run_night(
    bench: Path, night: Path, out: Path, seed: int, operator: str | None, real_time: bool, as_json: bool
) -> None:
    from daq.night import NightOrder
    from daq.nightfile import load_night
    from drivers.bench import load_bench

    with _mistakes():
        loaded = load_bench(bench)
        plan = load_night(night)
    targets = [run.target for run in plan.runs]
    order = NightOrder(bench=loaded, targets=targets, out=out, seed=seed, night=plan, operator=operator)
    virtual = loaded.bench.time.kind == "virtual" and not real_time
    _carry_out(order, virtual=virtual, live=not virtual, as_json=as_json)


def _carry_out(order: NightOrder, *, virtual: bool, live: bool, as_json: bool) -> None:
    from daq.night import run_night

    progress = _progress(live=live, as_json=as_json)

    async def work(clock: Clock, stopper: Stopper) -> Outcome:
        return await run_night(order, clock, observe=progress.observe, on_run=progress.begin, stopper=stopper)

    start_utc_ns = order.bench.bench.time.start_utc_ns if virtual else None
    _finish(_with_signals(work, progress, start_utc_ns=start_utc_ns), as_json)


def _with_signals(
    work: Callable[[Clock, Stopper], Awaitable[Outcome]], progress: Progress, *, start_utc_ns: int | None
) -> Outcome:
    """Run under real or virtual time; a signal asks for a clean stop. Known errors exit."""
    import asyncio

    from daq.carry import Stopper
    from drivers.clock import run_real, run_virtual

    stopper = Stopper()

    async def attended(clock: Clock) -> Outcome:
        with _signals(asyncio.get_running_loop(), stopper, clock):
            return await work(clock, stopper)

    try:
        return run_real(attended) if start_utc_ns is None else run_virtual(attended, start_utc_ns)
    except (SettingsError, DataError) as error:
        _die(Exit.MISTAKE, error)
    except DeviceError as error:
        _die(Exit.BENCH_FAULT, error)
    except GratingdError as error:
        _die(Exit.BROKE_OFF, error)
    except KeyboardInterrupt:
        _die(Exit.STOPPED, "stopped; unfinished journals can be recovered: gratingd recover FOLDER")
    finally:
        progress.close()


@contextlib.contextmanager
def _signals(loop: AbstractEventLoop, stopper: Stopper, clock: Clock) -> Iterator[None]:
    """SIGINT, SIGTERM and SIGHUP ask for a clean stop, each time they come.

    SIGHUP, a terminal that was closed, would otherwise end the process with the shutter open; a run started
    to survive that (nohup) ignores it and goes on. Once the work has ended they are ignored until the command
    has: whoever presses Ctrl-C once too often still gets what came out, and the exit code that belongs to it.
    """
    from daq.records import StopReason

    def stop(number: int) -> None:
        stopper.stop(StopReason.STOPPED_BY_USER, signal.Signals(number).name)

    before = {number: signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)}
    attended = [number for number, handler in before.items() if handler is not signal.SIG_IGN]
    for number in attended:
        if clock.is_virtual:  # a loop without a socket to wake it by, but it never waits
            signal.signal(number, lambda given, _: loop.call_soon_threadsafe(stop, given))
        else:
            loop.add_signal_handler(number, stop, number)
    try:
        yield
    finally:
        for number in attended:
            if not clock.is_virtual:
                loop.remove_signal_handler(number)
            signal.signal(number, signal.SIG_IGN)
            click.get_current_context().call_on_close(partial(signal.signal, number, before[number]))


def _progress(*, live: bool, as_json: bool) -> Progress:
    from daq.progress import Lines, Live, Silent

    if as_json:
        return Silent()
    if live and sys.stderr is not None and sys.stderr.isatty():
        return Live()
    return Lines(status_lines=live)


def _finish(outcome: Outcome, as_json: bool) -> None:
    """Print what came out, worst news last, and end with the code that says how it went."""
    from daq.carry import left_unsafe

    more = {"not_started": outcome.not_started, "problems": outcome.problems}
    _print_runs(outcome.runs, as_json, more)
    if outcome.not_started:
        click.echo(f"gratingd: not started: {', '.join(outcome.not_started)}", err=True)
    problems = [*outcome.problems, *(run["problem"] for run in outcome.runs if "problem" in run)]
    for problem in problems:
        click.echo(f"gratingd: {problem}", err=True)
    unsafe = [run for run in outcome.runs if left_unsafe(run)]
    for run in unsafe:
        safe = run["safe"]
        click.echo(
            f"gratingd: GO AND LOOK AT THE BENCH: after '{run['target']}' the shutter is {safe['shutter']}, "
            f"the drive {safe['drive']}: {'; '.join(safe['problems'])}",
            err=True,
        )
    sys.exit(_exit_code(outcome, bool(problems), bool(unsafe)))


def _exit_code(outcome: Outcome, has_problems: bool, is_unsafe: bool) -> Exit:
    reasons = {run["stop_reason"] for run in outcome.runs}
    if has_problems or "internal-error" in reasons:
        return Exit.BROKE_OFF
    if is_unsafe or reasons & {"fault", "over-light"}:
        return Exit.BENCH_FAULT
    if "stopped-by-user" in reasons or outcome.stopped == "stopped-by-user":
        return Exit.STOPPED
    return Exit.DONE


def _print_runs(runs: list[dict[str, Any]], as_json: bool, more: Mapping[str, Any] | None = None) -> None:
    if as_json:
        click.echo(json.dumps({"runs": runs, **(more or {})}, indent=2, allow_nan=False))
        return
    if not runs:
        return
    from daq.table import runs_table

    click.echo(runs_table(runs))


class _mistakes:
    """Turns the user's mistakes into messages and exit code 2."""

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: Any, error: BaseException | None, trace: Any) -> None:
        if isinstance(error, (SettingsError, DataError)):
            _die(Exit.MISTAKE, error)


def _die(code: Exit, error: object) -> NoReturn:
    for line in str(error).splitlines():
        click.echo(f"gratingd: {line}", err=True)
    sys.exit(code)


def _new_folder(name: str) -> Path:
    number = 1
    while (folder := Path(name if number == 1 else f"{name}-{number}")).exists():
        number += 1
    return folder


def _leave(number: int, frame: FrameType | None) -> None:
    """Ctrl-C while no run is under way: no device or file is open, so the process may just end.

    An exception would not do: some compiled modules turn one that comes while they are being imported into an
    ImportError or a SystemError of their own.
    """
    os.write(2, b"gratingd: stopped by Ctrl-C; no run was under way\n")
    os._exit(Exit.STOPPED)


def main() -> None:
    """The program, after the guard has looked at the packages."""
    if signal.getsignal(signal.SIGINT) is signal.default_int_handler:  # not where it is ignored on purpose
        signal.signal(signal.SIGINT, _leave)
    try:
        gratingd(prog_name="gratingd")
    except OSError as error:  # standard output on a full disk; devices and files have errors of their own
        _die(Exit.BROKE_OFF, error)
    except Exception:
        import traceback

        traceback.print_exc()
        _die(Exit.BROKE_OFF, "this is a defect of gratingd; please report it with the lines above")
