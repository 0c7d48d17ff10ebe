"""What a person has set at the bench is confirmed before the first light, and recorded.

The daemon can turn a grating; it cannot see what stands at a hand-set slit. A night that nobody confirmed is
a night measured with last week's slits, so nothing begins without a word: in the night file, on the command
line, or at the terminal.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass
from typing import Any

from daq.nightfile import LoadedNight
from drivers.bench import NO_FILTER, Bench, GratingOptics, LoadedBench
from drivers.complaints import as_typed, unit_of
from drivers.errors import SettingsError


@dataclass(frozen=True, slots=True)
class ByHandItem:
    """One thing a person has set: its key in `[confirmed]`, the bench file's value, and what to look at."""

    key: str
    value: str | float
    words: str


Ask = Callable[[Sequence[ByHandItem]], str | None]
"""Shows the list; the name of who confirms it, or None for no."""

WORDS = {
    "lamp": "lamp before the entrance slit",
    "lamp_current_a": "lamp current",
    "high_voltage_v": "high voltage of the detector",
    "gain": "gain of the detector's amplifier",
    "attenuator": "attenuator in the beam",
    "lamp_serial": "serial of the lamp",
    "grating_serial": "serial of the grating",
    "detector_serial": "serial of the detector",
}


def required(bench: Bench) -> tuple[ByHandItem, ...]:
    """What a person answers for at this bench, in the order of the list to walk along; () for a recorded
    spectrum, which nobody has set."""
    return tuple(_items(bench))


def _items(bench: Bench) -> Iterator[ByHandItem]:
    if not isinstance(bench.optics, GratingOptics):
        return
    if bench.slits is None:
        for key, slit in (("entrance_slit_um", "entrance slit"), ("exit_slit_um", "exit slit")):
            width_um = getattr(bench.optics, key)
            yield ByHandItem(key, width_um, f"{slit} at {width_um:g} um")
    if bench.filter is None:
        name = bench.by_hand.filter or NO_FILTER
        words = "no filter in the beam" if name == NO_FILTER else f"filter in the beam: {name}"
        yield ByHandItem("filter", name, words)
    for key, words in WORDS.items():
        value = getattr(bench.by_hand, key)
        if value is not None:
            shown = value if isinstance(value, str) else f"{value:g} {unit_of(key)}".rstrip()
            yield ByHandItem(key, value, f"{words}: {shown}")


def confirm(
    bench: LoadedBench, night: LoadedNight | None, *, by: str | None, ask: Ask | None
) -> dict[str, Any]:
    """`{"how": ..., "who": ..., "items": [{"key", "value", "words"}, ...]}` for a run's head.

    by : who confirms everything on the command line; None where nobody did.
    ask : shows the list on a terminal; None where there is none.

    A `[confirmed]` table of the night file is held against the bench file whoever else confirms. Raises
    SettingsError for what differs, and for what nobody has confirmed.
    """
    items = required(bench.bench)
    stated = None if night is None else night.night.confirmed
    if night is not None and stated is not None:
        _compare(items, stated.model_dump(exclude_none=True), bench, night, whole=by is None)
    if not items:
        return _record("nothing to confirm", None, items)
    if by is not None:
        return _record("command line", by, items)
    if stated is not None:
        return _record("night file", stated.operator, items)
    if ask is not None:
        who = ask(items)
        if who is None:
            raise SettingsError(
                str(bench.path), ["not confirmed; set the bench, or mend its file, and start again"]
            )
        return _record("asked", who, items)
    walk = "; ".join(item.words for item in items)
    raise SettingsError(
        str(bench.path),
        [
            f"a person must confirm what is set by hand ({walk}): look at the bench, then give --confirm, or"
            " for unattended work a table [confirmed] with operator and these keys in the night file"
        ],
    )


def _compare(
    items: Sequence[ByHandItem],
    stated: dict[str, Any],
    bench: LoadedBench,
    night: LoadedNight,
    *,
    whole: bool,
) -> None:
    """Raises SettingsError where the night file and the bench file do not agree; `whole`: nothing is
    missing."""
    problems = []
    for item in items:
        if item.key not in stated:
            if whole:
                problems.append(
                    f"confirmed.{item.key}: missing; {item.words} is set by hand and must be confirmed as"
                    f" {item.key} = {_toml(item.value)}"
                )
        elif stated[item.key] != item.value:
            problems.append(
                f"confirmed.{item.key} = {as_typed(stated[item.key])}: the bench file {bench.path.name} says"
                f" {_toml(item.value)}; set the bench and mend the file that is wrong"
            )
    known = {item.key for item in items}
    for key, value in stated.items():
        if key != "operator" and key not in known:
            problems.append(
                f"confirmed.{key} = {as_typed(value)}: not set by hand at the bench '{bench.bench.name}';"
                " leave it out, or state it in [by_hand] of the bench file"
            )
    if problems:
        raise SettingsError(str(night.path), problems)


def _record(how: str, who: str | None, items: Sequence[ByHandItem]) -> dict[str, Any]:
    return {"how": how, "who": who, "items": [asdict(item) for item in items]}


def _toml(value: str | float) -> str:
    return f'"{value}"' if isinstance(value, str) else f"{value:g}"


def login_name() -> str | None:
    """The login name of whoever started this, if the system knows one."""
    import getpass

    try:
        return getpass.getuser()
    except (KeyError, OSError):  # a service account without a name
        return None


def ask_on_terminal(who: str | None) -> Ask | None:
    """A question for the terminal; None where standard input or error is no terminal."""
    import sys

    import click

    if not (sys.stdin and sys.stdin.isatty() and sys.stderr and sys.stderr.isatty()):
        return None

    def ask(items: Sequence[ByHandItem]) -> str | None:
        click.echo("Set by hand at this bench:", err=True)
        for item in items:
            click.echo(f"  - {item.words}", err=True)
        try:
            answer = click.prompt("Look at each. Type yes if all of it is so", default="no", err=True)
        except click.Abort:  # the end of input (Ctrl-D)
            click.echo(err=True)
            return None
        return (who or "unnamed") if answer.strip().lower() == "yes" else None

    return ask
