"""The start-up guard, in real child processes: a hidden package ends in exit code 2 and a plain message."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from daq import guard

ROOT = Path(__file__).resolve().parent.parent
CHECK = "from daq import guard; guard.check(); print('passed')"
NESTED = (
    f"import subprocess, sys; sys.exit(subprocess.run([sys.executable, '-P', '-c', {CHECK!r}]).returncode)"
)


def child(*arguments: str, cwd: Path, path: list[Path]) -> subprocess.CompletedProcess[str]:
    environment = {k: v for k, v in os.environ.items() if not k.startswith("PYTHON")}
    environment["PYTHONPATH"] = os.pathsep.join(str(p) for p in path)
    return subprocess.run(
        [sys.executable, *arguments],
        cwd=cwd,
        env=environment,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


def refused(done: subprocess.CompletedProcess[str], package: str, place: Path) -> None:
    assert done.returncode == 2
    assert done.stdout == ""
    assert "gratingd: refusing to start" in done.stderr
    assert f"package {package!r} comes from {place}" in done.stderr
    assert "Traceback" not in done.stderr


def test_our_own_packages_pass(tmp_path: Path) -> None:
    assert guard.shadowed() == []
    done = child("-c", CHECK, cwd=tmp_path, path=[ROOT])
    assert (done.returncode, done.stdout, done.stderr) == (0, "passed\n", "")


def test_a_module_in_the_working_folder(tmp_path: Path) -> None:
    (tmp_path / "analysis.py").write_text("raise RuntimeError('never imported')\n")
    refused(child("-m", "daq", cwd=tmp_path, path=[ROOT]), "analysis", tmp_path / "analysis.py")


def test_without_the_working_folder_on_the_path_the_same_module_does_no_harm(tmp_path: Path) -> None:
    (tmp_path / "analysis.py").write_text("raise RuntimeError('never imported')\n")
    done = child("-P", "-c", CHECK, cwd=tmp_path, path=[ROOT])
    assert (done.returncode, done.stdout) == (0, "passed\n")


@pytest.mark.parametrize("package", ["drivers", "analysis", "simulators"])
def test_another_projects_package_earlier_on_the_path(package: str, tmp_path: Path) -> None:
    (tmp_path / package).mkdir()
    init = tmp_path / package / "__init__.py"
    init.write_text("raise RuntimeError('never imported')\n")
    refused(child("-P", "-c", CHECK, cwd=ROOT, path=[tmp_path, ROOT]), package, init)


def test_a_child_process_is_guarded_too(tmp_path: Path) -> None:
    (tmp_path / "simulators.py").write_text("")
    refused(
        child("-P", "-c", NESTED, cwd=ROOT, path=[tmp_path, ROOT]), "simulators", tmp_path / "simulators.py"
    )


def test_a_module_put_in_by_hand(tmp_path: Path) -> None:
    code = f"import sys, types; sys.modules['drivers'] = types.ModuleType('drivers'); {CHECK}"
    done = child("-P", "-c", code, cwd=tmp_path, path=[ROOT])
    assert done.returncode == 2
    assert "package 'drivers' comes from nowhere" in done.stderr


def test_a_package_that_is_missing(tmp_path: Path) -> None:
    """Half an installation: `daq` alone, its companions gone."""
    (tmp_path / "daq").mkdir()
    for name in ("__init__.py", "guard.py"):
        (tmp_path / "daq" / name).write_bytes((ROOT / "daq" / name).read_bytes())
    done = child(
        "-I", "-c", f"import sys; sys.path.insert(0, {str(tmp_path)!r}); {CHECK}", cwd=tmp_path, path=[]
    )
    assert done.returncode == 2
    for package in ("drivers", "analysis", "simulators"):
        assert f"package {package!r} comes from" in done.stderr


def test_the_guard_costs_little_to_import() -> None:
    heavy = {"numpy", "scipy", "h5py", "pydantic", "click"}
    code = f"import sys, daq.guard; print(sorted({heavy} & set(sys.modules)))"
    done = child("-c", code, cwd=ROOT, path=[ROOT])
    assert (done.returncode, done.stdout) == (0, "[]\n")
