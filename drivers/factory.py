"""From a bench file's `module:factory` to the thing itself: how a lab's own drivers come in."""

from __future__ import annotations

import difflib
import importlib
import sys
from collections.abc import Callable, Mapping
from typing import Any

from drivers.bench import LoadedBench
from drivers.errors import SettingsError
from drivers.protocols import DriverContext


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
    """The factories a bench names, by role: "world" (if any), "drive", "detector", "shutter", "ambient".

    The bench's own driver folders go to the end of `sys.path`, so that they can hide nothing. Raises one
    SettingsError for all that cannot be loaded.
    """
    for folder in loaded.bench.paths.drivers:
        place = str((loaded.folder / folder).resolve())
        if place not in sys.path:
            sys.path.append(place)
    bench = loaded.bench
    named = {
        "world": bench.world,
        "drive": bench.drive,
        "detector": bench.detector,
        "shutter": bench.shutter,
        "ambient": bench.ambient,
    }
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


def make(factory: Callable[..., Any], options: Mapping[str, Any], context: DriverContext, file: str) -> Any:
    """Call a factory; a mistake in its options is told with the bench file and the whole key."""
    try:
        return factory(dict(options), context)
    except SettingsError as error:
        prefix = f"{context.role}.options"
        problems = [f"{prefix}.{problem}" for problem in error.problems]
        raise SettingsError(file, problems) from error
