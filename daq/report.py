"""Reports: a page for each run and for each night, and tables for a customer, from run files alone."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

from daq import report_csv
from daq.records import utc_stamp
from daq.report_data import RunView, gather
from daq.report_page import NightView, night_page, run_page
from daq.report_tables import day_of
from daq.wholefile import write_whole
from drivers.errors import DataError
from drivers.slug import slug_of

MARK = b'<meta name="generator" content="gratingd">'
"""What tells a page of ours from somebody else's file of the same name."""

_SAFE = re.compile(r"[A-Za-z0-9][A-Za-z0-9._+-]*")


@dataclass(slots=True)
class Reported:
    """What was written, and what was wrong with the files that could not be used."""

    written: list[Path] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)


def report(files: Sequence[Path], folder: Path, *, with_csv: bool) -> Reported:
    """Write the pages of these run files, and of their nights, into `folder`; made if it is not there.

    The same files give the same bytes. A file that cannot be used is a problem told and costs none of the
    others. Raises DataError where the folder cannot be written, or where a file stands that is no report.
    """
    done = Reported()
    views = _gather_all(files, done.problems)
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for night in _nights(views):
            _write_night(night, folder, with_csv, done.written)
    except FileExistsError as error:
        raise DataError(f"{folder}: is a file; give the name of a folder") from error
    except OSError as error:
        raise DataError(
            f"{error.filename or folder}: cannot be written ({error.strerror or error}); make room or choose "
            "a folder that can be written"
        ) from error
    return done


def _gather_all(files: Sequence[Path], problems: list[str]) -> list[RunView]:
    """Every run once, however often its file is named."""
    views: dict[str, RunView] = {}
    for file in files:
        try:
            view = gather(file)
            other = views.setdefault(view.run_id, view)
            if not _SAFE.fullmatch(view.run_id):
                del views[view.run_id]
                raise DataError(f"{file}: its run identity {view.run_id!r} cannot be part of a file name")
            if other.path.resolve() != file.resolve():
                raise DataError(
                    f"{file}: holds the same run as {other.path} ({view.run_id}); give one of the two"
                )
        except DataError as error:
            problems.append(str(error))
    return sorted(views.values(), key=lambda view: (view.start_utc_ns, view.run_id))


def _nights(views: Sequence[RunView]) -> list[NightView]:
    """The runs by the night they belong to; a run measured by itself is a night of one."""
    grouped: dict[tuple[int, str], list[RunView]] = {}
    for view in views:
        grouped.setdefault((view.night_utc_ns, view.head["night"] or ""), []).append(view)
    made = []
    for (begun_ns, name), runs in grouped.items():
        slug = slug_of(name)
        stem = f"night-{utc_stamp(begun_ns)}{'-' if slug else ''}{slug}"
        title = name or f"Runs begun {day_of(begun_ns)}"
        made.append(
            NightView(title, f"{stem}.html", tuple(runs), {v.run_id: f"{v.run_id}.html" for v in runs})
        )
    return made


def _write_night(night: NightView, folder: Path, with_csv: bool, written: list[Path]) -> None:
    def put(name: str, data: bytes, mark: bytes) -> None:
        path = folder / name
        _check_ours(path, mark)
        write_whole(path, data)
        written.append(path)

    put(night.page, night_page(night).encode(), MARK)
    for view in night.runs:
        put(night.page_of[view.run_id], run_page(view, night).encode(), MARK)
    if not with_csv:
        return
    header = report_csv.header_of(report_csv.NIGHT_COLUMNS)
    put(f"{Path(night.page).stem}.csv", report_csv.night_csv(night.runs), header)
    header = report_csv.header_of(report_csv.POINT_COLUMNS)
    for view in night.runs:
        put(f"{view.run_id}.csv", report_csv.points_csv(view), header)


def _check_ours(path: Path, mark: bytes) -> None:
    """Raises DataError if something stands there that is no report of ours."""
    if not path.exists():
        return
    if path.is_file():
        with path.open("rb") as stream:
            if mark in stream.read(4096):
                return
    raise DataError(
        f"{path}: stands there already and is no report of gratingd; move it away or choose another folder"
    )
