"""The command line. Everything heavy is imported where it is used, so that --help answers at once."""

from __future__ import annotations

import os
import signal
from types import FrameType

import click

from daq import cli_bench, cli_files
from daq.cli_common import EXIT_CODES, Exit, die

__all__ = ["Exit", "gratingd", "main"]


@click.group(epilog=EXIT_CODES, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="gratingd", prog_name="gratingd")
def gratingd() -> None:
    """Run a scanning grating spectrometer through the night: one line or a close pair, how far apart, how
    sure, and every point on disk."""


for _command in (
    cli_bench.demo,
    cli_files.check,
    cli_bench.night,
    cli_bench.measure,
    cli_bench.recover,
    cli_files.analyse,
    cli_files.report,
    cli_files.note,
    cli_files.linearity,
    cli_files.schema,
):
    gratingd.add_command(_command)


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
        die(Exit.BROKE_OFF, error)
    except Exception:
        import traceback

        traceback.print_exc()
        die(Exit.BROKE_OFF, "this is a defect of gratingd; please report it with the lines above")
