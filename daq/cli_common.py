"""What all commands have in common: exit codes, shared options, how mistakes and answers are told."""

from __future__ import annotations

import contextlib
import json
import sys
from collections.abc import Callable, Mapping
from enum import IntEnum
from pathlib import Path
from typing import Any, NoReturn

import click

from drivers.errors import DataError, SettingsError


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


def json_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Print one JSON document on standard output and nothing else there."
    return click.option("--json", "as_json", is_flag=True, help=text)(command)


def out_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Folder for journals and files; made if it is not there. Default: the working folder's 'runs'."
    return click.option("--out", type=click.Path(path_type=Path), default=Path("runs"), help=text)(command)


def _named(context: click.Context, option: click.Parameter, value: str | None) -> str | None:
    if value is not None and not value.strip():
        raise click.BadParameter("is empty; give a name or leave the option out")
    return value


def operator_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Who answers for what is measured; recorded."
    return click.option("--operator", callback=_named, help=text)(command)


def confirm_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Somebody has looked: slits, filter, lamp and all of [by_hand] are as the bench file says."
    return click.option("--confirm", "is_confirmed", is_flag=True, help=text)(command)


def seed_option(command: Callable[..., Any]) -> Callable[..., Any]:
    text = "Seed of simulated devices; real ones ignore it."
    return click.option("--seed", type=click.IntRange(0, 2**63 - 1), default=1, show_default=True, help=text)(
        command
    )


def print_runs(runs: list[dict[str, Any]], as_json: bool, more: Mapping[str, Any] | None = None) -> None:
    if as_json:
        click.echo(json.dumps({"runs": runs, **(more or {})}, indent=2, allow_nan=False))
        return
    if not runs:
        return
    from daq.table import runs_table

    click.echo(runs_table(runs))


class mistakes:
    """Turns the user's mistakes into messages and exit code 2."""

    def __enter__(self) -> None:
        return None

    def __exit__(self, kind: Any, error: BaseException | None, trace: Any) -> None:
        if isinstance(error, (SettingsError, DataError)):
            die(Exit.MISTAKE, error)


def die(code: Exit, error: object) -> NoReturn:
    with contextlib.suppress(OSError):  # nobody listens any more: the code still tells
        for line in str(error).splitlines():
            click.echo(f"gratingd: {line}", err=True)
    sys.exit(code)
