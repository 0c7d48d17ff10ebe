"""From a bench file's `module:factory` to the thing itself: how a lab's own drivers come in."""

from __future__ import annotations

import difflib
import importlib
import inspect
import sys
import traceback
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from drivers.bench import Bench, LoadedBench
from drivers.errors import GratingdError, SettingsError
from drivers.protocols import (
    Ambient,
    AnalogueDetector,
    Detector,
    DriverContext,
    GratingDrive,
    Selector,
    Shutter,
    Slits,
)

PROTOCOLS: Mapping[str, type] = {
    "drive": GratingDrive,
    "detector": Detector,
    "reference": Detector,
    "shutter": Shutter,
    "slits": Slits,
    "filter": Selector,
    "lamp": Selector,
    "ambient": Ambient,
}
"""What the device of each role must be able to do; an analogue detector has a protocol of its own."""


def load_object(text: str, file: str, key: str) -> Callable[..., Any]:
    """What "module:name" names. Raises SettingsError naming file and key when it cannot be used."""

    def refuse(why: str) -> SettingsError:
        return SettingsError(file, [f"{key} = {text!r}: {why}"])

    module_name, _, name = text.partition(":")
    try:
        module = importlib.import_module(module_name)
    except ModuleNotFoundError as error:
        missing = error.name or ""
        if module_name == missing or module_name.startswith(f"{missing}."):
            raise refuse(
                f"there is no module {missing!r}; name an installed one, or its folder in [paths] drivers"
            ) from error
        raise refuse(f"module {module_name!r} needs {missing!r}, which is not installed") from error
    except Exception as error:  # a lab's own driver may fail in any way while it is imported
        raise refuse(f"importing {module_name!r} failed: {type(error).__name__}: {error}") from error
    if not hasattr(module, name):
        near = difflib.get_close_matches(name, [n for n in dir(module) if not n.startswith("_")], n=1)
        hint = f"; did you mean {f'{module_name}:{near[0]}'!r}?" if near else ""
        raise refuse(f"module {module_name!r} has no {name!r}{hint}")
    found = getattr(module, name)
    if not callable(found):
        raise refuse(f"{name!r} is not a factory: it cannot be called")
    return found  # type: ignore[no-any-return]


def load_factories(loaded: LoadedBench) -> dict[str, Callable[..., Any]]:
    """The factories a bench names, by role: "world" and those of PROTOCOLS, if they are there.

    The bench's own driver folders go to the end of `sys.path`, so that they can hide nothing. Raises one
    SettingsError for all that cannot be loaded.
    """
    for folder in loaded.bench.paths.drivers:
        place = str((loaded.folder / folder).resolve())
        if place not in sys.path:
            sys.path.append(place)
    bench = loaded.bench
    named = {"world": bench.world} | {role: getattr(bench, role) for role in PROTOCOLS}
    factories: dict[str, Callable[..., Any]] = {}
    problems: list[str] = []
    for role, table in named.items():
        if table is None:
            continue
        try:
            factories[role] = load_object(table.factory, str(loaded.path), f"{role}.factory")
        except SettingsError as error:
            problems += error.problems
    if problems:
        raise SettingsError(str(loaded.path), problems)
    return factories


def protocol_of(role: str, bench: Bench) -> type | None:
    """What the device of a role must be able to do on this bench; None for the world."""
    if role == "detector" and bench.detector.kind == "analogue":
        return AnalogueDetector
    return PROTOCOLS.get(role)


def make(
    factory: Callable[..., Any],
    options: Mapping[str, Any],
    context: DriverContext,
    file: str,
    protocol: type | None,
) -> Any:
    """Call a factory and look at what it returned.

    Raises SettingsError with the bench file and the key: for a mistake in the options, for a factory that
    fails in a way of its own, and for a device that lacks what the protocol of its role asks (None: nothing).
    DeviceError passes.
    """
    key = f"{context.role}.factory"
    try:
        made = factory(dict(options), context)
    except SettingsError as error:
        prefix = f"{context.role}.options"
        problems = [f"{prefix}.{problem}" for problem in error.problems]
        raise SettingsError(file, problems) from error
    except GratingdError:
        raise
    except Exception as error:  # a lab's own factory may fail in any way
        said = " ".join(f"{type(error).__name__}: {error}".split())
        problem = f"{key}: the factory {_name_of(factory)} failed: {said}{_place_of(error)}"
        raise SettingsError(file, [problem]) from error
    if protocol is not None:
        told = f"{key}: what the factory {_name_of(factory)} returned"
        problems = [f"{told} {problem}" for problem in shortcomings(made, protocol)]
        if problems:
            raise SettingsError(file, problems)
    return made


def shortcomings(device: object, protocol: type) -> list[str]:
    """What a device lacks of a protocol, one phrase each: methods that are missing, not written with
    "async def", or that cannot be called as the protocol writes them."""
    if inspect.iscoroutine(device):
        device.close()
        return ["is a coroutine; write the factory with a plain 'def' and open the link in the first call"]
    if device is None:
        return ["is None; end the factory with 'return' and the device"]
    kind = type(device).__name__
    problems = []
    for name, parameters in _methods_of(protocol).items():
        wanted = f"{name}({_spelled(parameters)})"
        method = getattr(device, name, None)
        if not callable(method):
            problems.append(f"({kind}) has no method {wanted}")
        elif not inspect.iscoroutinefunction(method):
            problems.append(f"({kind}) has a {name} that is not written with 'async def'")
        elif not _can_be_called(method, parameters):
            problems.append(f"({kind}) has a {name} that cannot be called as {wanted}")
    return problems


def _methods_of(protocol: type) -> dict[str, list[inspect.Parameter]]:
    """The protocol's public methods by name, each with its parameters but self."""
    functions = inspect.getmembers(protocol, inspect.isfunction)
    return {
        name: list(inspect.signature(function).parameters.values())[1:]
        for name, function in functions
        if not name.startswith("_")
    }


def _is_named(parameter: inspect.Parameter) -> bool:
    return parameter.kind is inspect.Parameter.KEYWORD_ONLY


def _spelled(parameters: list[inspect.Parameter]) -> str:
    plain = [parameter.name for parameter in parameters if not _is_named(parameter)]
    named = [parameter.name for parameter in parameters if _is_named(parameter)]
    return ", ".join([*plain, *(["*"] if named else []), *named])


def _can_be_called(method: Callable[..., Any], parameters: list[inspect.Parameter]) -> bool:
    plain = [0 for parameter in parameters if not _is_named(parameter)]
    named = {parameter.name: 0 for parameter in parameters if _is_named(parameter)}
    try:
        inspect.signature(method).bind(*plain, **named)
    except TypeError:
        return False
    return True


def _name_of(factory: Callable[..., Any]) -> str:
    module, name = getattr(factory, "__module__", None), getattr(factory, "__qualname__", None)
    return f"{module}:{name}" if module and name else repr(factory)


def _place_of(error: Exception) -> str:
    """Where it was raised, unless the call itself could not be made."""
    last = traceback.extract_tb(error.__traceback__)[-1]
    return "" if last.filename == __file__ else f" ({Path(last.filename).name}, line {last.lineno})"
