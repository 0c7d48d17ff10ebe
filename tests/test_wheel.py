"""The program as it is installed: a wheel, unpacked in an environment of its own, far from the checkout."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import sysconfig
import venv
import zipfile
from pathlib import Path

import pytest
from commandline import ROOT
from demo_truth import faults_of

from daq.files import shipped_names

pytestmark = pytest.mark.slow

SHIPPED_PARTS = ("daq", "drivers", "analysis", "simulators", "configs")


def plain_environment() -> dict[str, str]:
    return {k: v for k, v in os.environ.items() if not k.startswith(("PYTHON", "PIP"))}


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Built from a copy of the checkout's sources by the build backend that pyproject.toml names."""
    folder = tmp_path_factory.mktemp("wheel")
    copy = folder / "source"
    unwanted = shutil.ignore_patterns("__pycache__", "*.pyc")
    for part in SHIPPED_PARTS:
        shutil.copytree(ROOT / part, copy / part, ignore=unwanted)
    for name in ("pyproject.toml", "README.md"):
        shutil.copy(ROOT / name, copy / name)
    build = "import sys, hatchling.build; print(hatchling.build.build_wheel(sys.argv[1]))"
    done = subprocess.run(
        [sys.executable, "-c", build, str(folder)],
        cwd=copy,
        env=plain_environment(),
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    (built,) = folder.glob("gratingd-*.whl")
    return built


@pytest.fixture(scope="module")
def installed(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The `gratingd` command of an environment that holds this wheel; nothing comes over the network.

    The dependencies are the running environment's, found through links in a folder put last on the path: the
    folder as a whole would bring this checkout's own packages along, which an editable installation names.
    """
    home = tmp_path_factory.mktemp("installed") / "venv"
    venv.create(home, with_pip=False, symlinks=True)
    python = home / "bin" / "python"
    site = Path(sysconfig.get_path("purelib", vars={"base": str(home), "platbase": str(home)}))
    dependencies = home / "dependencies"
    dependencies.mkdir()
    for entry in Path(sysconfig.get_path("purelib")).iterdir():
        if "gratingd" not in entry.name and entry.suffix != ".pth" and entry.name not in SHIPPED_PARTS:
            (dependencies / entry.name).symlink_to(entry)
    (site / "dependencies.pth").write_text(f"{dependencies}\n")
    pip = [sys.executable, "-m", "pip", "--python", str(python), "install"]
    offline = ["--quiet", "--no-deps", "--no-index", "--disable-pip-version-check", str(wheel)]
    done = subprocess.run(
        [*pip, *offline], env=plain_environment(), capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    return home / "bin" / "gratingd"


def call(command: Path, *arguments: str, cwd: Path) -> str:
    done = subprocess.run(
        [str(command), *arguments],
        cwd=cwd,
        env=plain_environment(),
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    return done.stdout


def test_the_wheel_holds_the_packages_and_every_shipped_file(wheel: Path) -> None:
    names = set(zipfile.ZipFile(wheel).namelist())
    assert {f"daq/_configs/{name}" for name in shipped_names()} <= names
    shipped = {path.relative_to(ROOT / "configs") for path in (ROOT / "configs").rglob("*") if path.is_file()}
    assert {f"daq/_configs/{path.as_posix()}" for path in shipped} <= names
    data = {path.relative_to(ROOT).as_posix() for path in (ROOT / "analysis" / "data").iterdir()}
    assert "analysis/data/reference_lines.dat" in data <= names
    modules = {
        path.relative_to(ROOT).as_posix() for part in SHIPPED_PARTS for path in (ROOT / part).rglob("*.py")
    }
    assert {name for name in names if name.endswith(".py")} == modules
    tops = {name.partition("/")[0] for name in names}
    assert {top for top in tops if not top.endswith(".dist-info")} == set(SHIPPED_PARTS) - {"configs"}


def test_the_demo_runs_from_the_installed_packages(installed: Path, tmp_path: Path) -> None:
    runs = json.loads(call(installed, "demo", "--json", cwd=tmp_path))["runs"]
    assert list(faults_of(runs)) == []
    assert all(Path(run["file"]).parent == tmp_path / "gratingd-demo" for run in runs)
    again = json.loads(call(installed, "analyse", "--json", *(run["file"] for run in runs), cwd=tmp_path))
    assert [run["reproduces"] for run in again["runs"]] == ["bit-equal"] * 9


def test_nothing_comes_from_the_checkout(installed: Path, tmp_path: Path) -> None:
    code = (
        "import json, daq, drivers, analysis, simulators, daq.files as files\n"
        "print(json.dumps([m.__file__ for m in (daq, drivers, analysis, simulators)]))\n"
        "print(files.shipped_folder())\n"
        "print(json.dumps(files.shipped_names()))"
    )
    modules, folder, names = call(installed.with_name("python"), "-P", "-c", code, cwd=tmp_path).splitlines()
    home = installed.parent.parent
    assert all(Path(module).is_relative_to(home) for module in json.loads(modules))
    assert Path(folder).is_relative_to(home)
    assert json.loads(names) == shipped_names()


def test_the_installed_version_is_told(installed: Path, tmp_path: Path, wheel: Path) -> None:
    assert call(installed, "--version", cwd=tmp_path) == f"gratingd, version {wheel.name.split('-')[1]}\n"
