"""The way in: refuse to start when one of the packages is not the one that came with this program.

The four packages have plain names, and Python takes the first folder on its path that has one: an
`analysis.py` in the working folder, or another project's `drivers`, would be imported in silence and measure
nonsense. The console script and every child process call `check()` before they import anything else.
"""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

PACKAGES = ("daq", "drivers", "analysis", "simulators")
REFUSED = 2


def shadowed() -> list[str]:
    """One line for each package that does not come from beside this one; empty when all is well."""
    home = Path(__file__).resolve().parent.parent
    lines = []
    for name in PACKAGES:
        expected = home / name / "__init__.py"
        found = _origin(name)
        if found is None or found.resolve() != expected:
            lines.append(f"package {name!r} comes from {found or 'nowhere'}, expected {expected}")
    return lines


def _origin(name: str) -> Path | None:
    try:
        spec = importlib.util.find_spec(name)
    except (ImportError, ValueError):  # ValueError: a module put into sys.modules by hand, without a spec
        return None
    if spec is None:
        return None
    if spec.origin is None or not spec.has_location:
        places = list(spec.submodule_search_locations or [])
        return Path(places[0]) if places else None
    return Path(spec.origin)


def check() -> None:
    """Return when every package is our own; otherwise say so on stderr and exit with code 2."""
    lines = shadowed()
    if not lines:
        return
    print("gratingd: refusing to start, another package hides one of its own:", file=sys.stderr)
    for line in lines:
        print(f"  {line}", file=sys.stderr)
    print(
        "  start from another folder, unset PYTHONPATH, or install gratingd in an environment of its own",
        file=sys.stderr,
    )
    raise SystemExit(REFUSED)
