"""Where configuration files are found: in a checkout, in an installed package, by the names people type."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from daq import files
from drivers.errors import SettingsError

ROOT = Path(__file__).resolve().parent.parent


def pretend_installed(monkeypatch: pytest.MonkeyPatch, site: Path) -> Path:
    """Lay the package out as a wheel does: `daq/_configs` inside the package, nothing beside it."""
    package = site / "daq"
    package.mkdir(parents=True)
    shutil.copytree(ROOT / "configs", package / "_configs")
    monkeypatch.setattr(files, "__file__", str(package / "files.py"))
    return package


def test_a_checkout_uses_its_own_configs() -> None:
    assert files.shipped_folder() == ROOT / "configs"


def test_an_installed_package_uses_the_packed_copy(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    here = files.shipped_names()
    package = pretend_installed(monkeypatch, tmp_path)
    assert files.shipped_folder() == package / "_configs"
    assert files.shipped_names() == here


def test_a_strangers_configs_folder_beside_the_installed_package_is_left_alone(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    package = pretend_installed(monkeypatch, tmp_path)
    (tmp_path / "configs").mkdir()
    assert files.shipped_folder() == package / "_configs"


def test_shipped_names_the_file() -> None:
    assert files.shipped("nights/acceptance.toml") == ROOT / "configs" / "nights" / "acceptance.toml"
    with pytest.raises(SettingsError, match="shipped under a near name: nights/acceptance"):
        files.shipped("nights/aceptance.toml")


@pytest.mark.parametrize(
    "given", ["targets/hg-313-pair.toml", "targets/hg-313-pair", "hg-313-pair.toml", "hg-313-pair"]
)
def test_all_the_spellings_of_a_shipped_file(given: str) -> None:
    assert files.resolve(given) == ROOT / "configs" / "targets" / "hg-313-pair.toml"
    assert files.resolve(given, "targets") == ROOT / "configs" / "targets" / "hg-313-pair.toml"


def test_a_users_own_file_comes_first(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    own = tmp_path / "targets" / "hg-313-pair.toml"
    own.parent.mkdir()
    own.write_text("format = 1\n")
    monkeypatch.chdir(tmp_path)
    assert files.resolve("targets/hg-313-pair.toml").resolve() == own


def test_a_users_own_folder_is_handed_on_to_be_refused_as_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "acceptance").mkdir()
    monkeypatch.chdir(tmp_path)
    assert files.resolve("acceptance") == Path("acceptance")


def test_a_wrong_name_is_answered_with_the_near_ones() -> None:
    with pytest.raises(SettingsError) as caught:
        files.resolve("my/targets/hg-313-par.toml", "targets")
    (problem,) = caught.value.problems
    assert caught.value.file == "my/targets/hg-313-par.toml"
    assert problem.startswith("no such file; shipped under a near name: targets/hg-313-pair.toml")


def test_a_name_like_no_other_is_answered_with_all_of_its_kind() -> None:
    with pytest.raises(SettingsError) as caught:
        files.resolve("zzzzzzzz", "nights")
    (problem,) = caught.value.problems
    assert problem == "no such file; shipped are: nights/acceptance.toml, nights/lamp-works.toml"


def test_the_kind_keeps_other_files_out() -> None:
    with pytest.raises(SettingsError, match=r"is a night .*; a bench is wanted here"):
        files.resolve("acceptance", "benches")


def test_no_way_out_of_the_shipped_folder() -> None:
    with pytest.raises(SettingsError, match="no such"):
        files.shipped("nights/../targets/hg-313-pair.toml")


def test_a_name_in_two_folders_is_not_guessed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    package = pretend_installed(monkeypatch, tmp_path)
    shutil.copy(
        package / "_configs" / "targets" / "hg-313-pair.toml",
        package / "_configs" / "nights" / "hg-313-pair.toml",
    )
    with pytest.raises(SettingsError) as caught:
        files.resolve("hg-313-pair")
    assert caught.value.problems == [
        "no such file, and several shipped ones fit: nights/hg-313-pair.toml, targets/hg-313-pair.toml"
    ]
    assert files.resolve("hg-313-pair", "targets").parent.name == "targets"
