"""Where the shipped configuration files are: the checkout's own, else the copy packed with the package."""

from __future__ import annotations

import difflib
from pathlib import Path

from drivers.errors import SettingsError

KINDS = ("benches", "targets", "nights")
_NOUNS = {"benches": "a bench", "targets": "a target", "nights": "a night", "": "another file"}


def shipped_folder() -> Path:
    """The folder of the shipped files. `pyproject.toml` tells a checkout from an installed package."""
    package = Path(__file__).resolve().parent
    checkout = package.parent
    if (checkout / "configs").is_dir() and (checkout / "pyproject.toml").is_file():
        return checkout / "configs"
    return package / "_configs"


def shipped_names() -> list[str]:
    """Every shipped bench, target and night, such as "benches/emberlight-3.toml", sorted."""
    folder = shipped_folder()
    return sorted(f"{kind}/{path.name}" for kind in KINDS for path in (folder / kind).glob("*.toml"))


def shipped(relative: str) -> Path:
    """The shipped file of that name ("benches/emberlight-3.toml"). Raises SettingsError with near names."""
    if relative not in shipped_names():
        raise SettingsError(relative, [f"no such shipped file{_near(relative, shipped_names())}"])
    return shipped_folder() / relative


def resolve(given: str, kind: str | None = None) -> Path:
    """The file a user means: the path as given, else a shipped file.

    A shipped file is named by "benches/emberlight-3.toml", "benches/emberlight-3", "emberlight-3.toml" or
    "emberlight-3"; `kind` ("benches", "targets", "nights") keeps the search to one folder. Raises
    SettingsError with the nearest names when nothing is there, and when several shipped files fit.
    """
    path = Path(given)
    if path.exists():
        return path
    names = [name for name in shipped_names() if kind is None or name.startswith(f"{kind}/")]
    found = [name for name in names if given in _spellings(name)]
    if len(found) > 1:
        raise SettingsError(given, [f"no such file, and several shipped ones fit: {', '.join(found)}"])
    if not found:
        others = [name for name in shipped_names() if name not in names and given in _spellings(name)]
        if others:
            problem = (
                f"is {_NOUNS[others[0].partition('/')[0]]} ({others[0]}); {_NOUNS[kind or '']} is wanted here"
            )
            raise SettingsError(given, [problem])
        raise SettingsError(given, [f"no such file{_near(given, names)}"])
    return shipped_folder() / found[0]


def _spellings(name: str) -> set[str]:
    file = name.rpartition("/")[2]
    return {name, name.removesuffix(".toml"), file, file.removesuffix(".toml")}


def _near(given: str, names: list[str]) -> str:
    """The nearest shipped names, by their file names: folders are typed right more often."""
    wanted = Path(given).name.removesuffix(".toml")
    by_stem = {Path(name).stem: name for name in names}
    close = difflib.get_close_matches(wanted, by_stem, n=3, cutoff=0.5)
    if close:
        return f"; shipped under a near name: {', '.join(by_stem[stem] for stem in close)}"
    return f"; shipped are: {', '.join(names)}" if names else ""
