"""Commands that read files and open no device: check, schema, analyse, linearity, report, note."""

from __future__ import annotations

import json
import sys
from collections.abc import Sequence
from pathlib import Path

import click

from daq.cli_common import Exit, die, json_option, mistakes, out_option, print_runs
from drivers.errors import DataError


@click.command()
@click.argument("bench")
@click.argument("targets", nargs=-1, metavar="[TARGET]...")
@json_option
def check(bench: str, targets: Sequence[str], as_json: bool) -> None:
    """Say from the files alone what the bench of the file BENCH makes of each TARGET, and what is wrong.

    No device is opened. Dispersion, bandpass, resolving power, reach, sampling, order overlap, ghosts, times,
    then findings, worst first. Exit code 2 if any of them is a problem: a run would be refused or worthless.
    """
    from daq.check import checked
    from daq.files import resolve
    from daq.target import load_target
    from drivers.bench import load_bench

    with mistakes():
        loaded = load_bench(resolve(bench, "benches"))
        report = checked(loaded, [load_target(resolve(target, "targets")) for target in targets])
    if as_json:
        click.echo(json.dumps(report, indent=2, allow_nan=False))
    else:
        from daq.check_text import check_text

        click.echo(check_text(report))
    if report["problems"]:
        sys.exit(Exit.MISTAKE)


@click.command()
@click.argument("kind", type=click.Choice(["bench", "target", "night"]), required=False)
def schema(kind: str | None) -> None:
    """Print the JSON Schema of a settings file, for editors that complete and check; without KIND all three,
    by kind."""
    from daq.schema import KINDS, schema_of

    shown = schema_of(kind) if kind is not None else {each: schema_of(each) for each in KINDS}
    click.echo(json.dumps(shown, indent=2))


@click.command()
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="FILE...")
@click.option("-o", "--out", type=click.Path(path_type=Path), required=True, help="Folder; made if need be.")
@click.option("--csv", "with_csv", is_flag=True, help="Also tables for a spreadsheet: points, and answers.")
def report(files: Sequence[Path], out: Path, with_csv: bool) -> None:
    """Write a page for each of these run files (.h5) and for each of their nights, as HTML without network.

    The pages of runs that go on, or broke off, show how far they had come.
    """
    from daq.report import report as write_report

    try:
        done = write_report(files, out, with_csv=with_csv)
    except DataError as error:
        die(Exit.MISTAKE, error)
    for path in done.written:
        click.echo(path)
    for problem in done.problems:
        click.echo(f"gratingd: {problem}", err=True)
    if done.problems:
        sys.exit(Exit.MISTAKE)


@click.command()
@click.argument("run")
@click.argument("text")
@click.option("--author", help="Who says so; recorded.")
@out_option
def note(run: str, text: str, author: str | None, out: Path) -> None:
    """Add a note to the log book of a finished RUN: its file (.h5), or its identity in the folder --out.

    The rest of the file stays as it was, to the bit; notes are kept when the file is made again.
    """
    from daq.notes import add_note, find_run
    from drivers.clock import RealClock

    with mistakes():
        path = find_run(run, out)
        made = add_note(path, text, author=author, clock=RealClock())
    click.echo(f"{path}: noted at {made.date}")


@click.command()
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

        with mistakes():
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
        print_runs(runs, as_json)
    for run in runs:
        if run["reproduces"] is not None and not as_json:
            click.echo(f"{run['target']}: re-analysis: {comparison(run['reproduces'])}")
    if problems:
        sys.exit(Exit.MISTAKE)


@click.command()
@click.argument("plain", type=click.Path(path_type=Path))
@click.argument("attenuated", type=click.Path(path_type=Path))
@json_option
def linearity(plain: Path, attenuated: Path, as_json: bool) -> None:
    """Say whether the detector is linear, from two run files of one bright target.

    The first is measured as it is, the second through a neutral attenuator put in by hand, whose
    transmission need not be known. Tells the dead time (of an amplifier the curvature, and the variance law
    of its readings) and whether the bench file's holds. Exit code 2 where the files cannot be compared.
    """
    from daq.linearity import linearity as compare
    from daq.linearity import text_lines

    with mistakes():
        made = compare(plain, attenuated)
    click.echo(json.dumps(made, indent=2, allow_nan=False) if as_json else "\n".join(text_lines(made)))


# ---- parts ----------------------------------------------------------------------------------------------


def _given(context: click.Context, *names: str) -> list[str]:
    """Those of the options that the user typed, as they are spelled."""
    typed = click.core.ParameterSource.COMMANDLINE
    return [f"--{name.replace('_', '-')}" for name in names if context.get_parameter_source(name) is typed]
