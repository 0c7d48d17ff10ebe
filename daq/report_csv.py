"""Tables for a customer's spreadsheet: the points of a run, and the answers of a night.

UTF-8 with a byte-order mark, by which spreadsheets know it; commas between, points in numbers; units stand in
the column names.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

from daq.export_layout import iso_utc
from daq.report_data import RunView

POINT_COLUMNS = (
    "wavelength_nm", "medium", "counts", "gate_s", "rate_per_s", "rate_u_per_s", "model_per_s",
    "residual_per_s",
)  # fmt: skip

UNITS = (
    "separation_air_pm", "separation_u_air_pm", "separation_vacuum_pm", "separation_u_vacuum_pm",
    "separation_per_cm", "separation_u_per_cm", "separation_mev", "separation_u_mev", "separation_ghz",
    "separation_u_ghz",
)  # fmt: skip

NIGHT_COLUMNS = (
    "target", "run_id", "start_utc", "verdict", "medium", "separation_pm", "separation_u_pm", *UNITS, "ratio",
    "ratio_u", "stop_reason", "bench_time_s", "light_s", "points", "flags",
)  # fmt: skip

FORMULA = ("=", "+", "-", "@", "\t", "\r")
"""A spreadsheet takes a text that begins so for a formula and carries it out (common practice: a leading
apostrophe makes it text again)."""


def points_csv(view: RunView) -> bytes:
    """The points of a run by wavelength: numbers as the run file has them, to the last bit."""
    points = view.points
    if points is None:
        return _written(POINT_COLUMNS, [])
    model = points.model_per_s
    empty = np.full(points.rate_per_s.shape, None, dtype=object)
    columns: Sequence[Iterable[Any]] = (
        points.wavelength_nm.tolist(),
        [view.medium] * points.counts.size,
        [round(count) for count in points.counts.tolist()],
        points.gate_s.tolist(),
        points.rate_per_s.tolist(),
        points.rate_u_per_s.tolist(),
        (empty if model is None else model).tolist(),
        (empty if model is None else points.rate_per_s - model).tolist(),
    )
    return _written(POINT_COLUMNS, zip(*columns, strict=True))


def night_csv(views: Sequence[RunView]) -> bytes:
    """A row a run: verdict, numbers, uncertainties, flags."""
    rows = []
    for view in views:
        summary = view.summary
        known = {**summary, **(summary["separation"] or {})}
        known |= {"start_utc": iso_utc(view.start_utc_ns), "run_id": view.run_id}
        known["flags"] = " ".join(summary["flags"])
        rows.append([known.get(column) for column in NIGHT_COLUMNS])
    return _written(NIGHT_COLUMNS, rows)


def header_of(columns: Sequence[str]) -> bytes:
    """The first line such a file has: by it an older one is known again."""
    return _written(columns, [])


def _written(columns: Sequence[str], rows: Iterable[Iterable[Any]]) -> bytes:
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\r\n")
    writer.writerow(columns)
    writer.writerows([_cell(value) for value in row] for row in rows)
    return stream.getvalue().encode("utf-8-sig")


def _cell(value: Any) -> Any:
    """Numbers as Python writes them, which reads back to the same bits; nothing for what is not known."""
    if isinstance(value, str) and value.startswith(FORMULA):
        return f"'{value}"
    return value
