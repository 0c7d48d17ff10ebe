"""README says what is so: its reader plots a run, its shipped names exist, its commands are the program's."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import cellar
from click.testing import CliRunner

from daq.cli import Exit, gratingd
from daq.files import resolve
from daq.records import StopReason

README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")


def test_the_reader_in_ten_lines_plots_a_run(tmp_path: Path) -> None:
    """The block as it stands, on a run's file, in a fresh interpreter; what it draws is not blank."""
    file = cellar.run(tmp_path).file
    (block,) = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
    code = [line for line in block.splitlines() if line.strip()]
    assert len([line for line in code if not line.startswith("import")]) <= 10
    script = block.replace("RUN.h5", str(file))
    subprocess.run(
        [sys.executable, "-c", script],
        cwd=tmp_path,
        check=True,
        env={"MPLBACKEND": "Agg", "HOME": str(tmp_path)},
    )
    picture = tmp_path / "run.png"
    assert picture.read_bytes().startswith(b"\x89PNG")
    assert picture.stat().st_size > 10_000


def test_commands_and_names_in_the_text_exist() -> None:
    shown = CliRunner().invoke(gratingd, ["--help"]).output
    for command in re.findall(r"^\| `gratingd (\w+)", README, re.MULTILINE):
        assert re.search(rf"^  {command}\b", shown, re.MULTILINE), command
    for name in ("emberlight-7", "lamp-works", "hg-313-narrow", "acceptance", "recorded-cd-361"):
        assert name in README
        assert resolve(name).is_file()
    for path in re.findall(r"\]\(((?:configs|tests)/[^)]+)\)", README):
        assert (Path(__file__).parents[1] / path).is_file(), path


def test_stop_reasons_and_exit_codes_are_all_told() -> None:
    for reason in StopReason:
        assert f"`{reason}`" in README
    for code in Exit:
        assert re.search(rf"^\| {code.value} \|", README, re.MULTILINE)
