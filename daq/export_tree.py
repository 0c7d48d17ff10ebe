"""Writing HDF5 in small steps: groups with a NeXus class, values with units, columns that grow.

Nothing here writes a time, a random number or anything of the machine: the same values give the same bytes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import h5py
import numpy as np

from daq.export_columns import COLUMNS, columns
from daq.records import Body, Record

_BLOCK = 4096  # rows written, and rows an HDF5 chunk
_TEXT = h5py.string_dtype("utf-8")

_UNITS = (
    ("_per_s_per_nm", "1/(s nm)"),
    ("steps_per_s2", "steps/s^2"),
    ("steps_per_s", "steps/s"),
    ("steps_per_radian", "steps/radian"),
    ("_per_k", "1/K"),
    ("_per_cm", "1/cm"),
    ("_per_radian", "1/radian"),
    ("_per_mm", "1/mm"),
    ("_per_s", "1/s"),
    ("_percent", "percent"),
    ("_steps", "steps"),
    ("_deg", "degree"),
    ("_rad", "radian"),
    ("_nm", "nm"),
    ("_pm", "pm"),
    ("_mm", "mm"),
    ("_um", "um"),
    ("_ns", "ns"),
    ("_hz", "Hz"),
    ("_ghz", "GHz"),
    ("_mev", "meV"),
    ("_k", "K"),
    ("_pa", "Pa"),
    ("_c", "degC"),
    ("_s", "s"),
)


def unit_of(name: str) -> str | None:
    """Unit that stands in a name: `dwell_s` is "s", `steps` "steps"; None if there is none."""
    if name in ("steps", "reported_steps"):
        return "steps"
    return next((unit for ending, unit in _UNITS if name.endswith(ending)), None)


def group(parent: h5py.Group, name: str, nx_class: str) -> h5py.Group:
    """A new group of NeXus class `nx_class`."""
    made = parent.create_group(name)
    made.attrs["NX_class"] = nx_class
    return made


def put(
    parent: h5py.Group, name: str, value: Any, /, *, units: str | None = None, **attributes: str
) -> h5py.Dataset | None:
    """Write a number, a string or a list or array of either; None and an empty list write nothing.

    `units` defaults to what the name says. Numbers that are missing in a list (null) become NaN.
    """
    if value is None or (isinstance(value, (list, tuple)) and not value):
        return None
    data, dtype = _storable(value)
    made = parent.create_dataset(name, data=data, dtype=dtype, track_times=False)
    units = units or (unit_of(name) if dtype is not _TEXT else None)
    if units is not None:
        made.attrs["units"] = units
    for key, text in attributes.items():
        made.attrs[key] = text
    return made


def tree(parent: h5py.Group, body: Body) -> None:
    """A JSON object: objects become groups, numbers and strings fields, lists arrays; null writes nothing.

    A list of objects with the same keys becomes a group of columns.
    """
    for name, value in body.items():
        if isinstance(value, Mapping):
            tree(group(parent, name, "NXcollection"), value)
        elif isinstance(value, (list, tuple)) and value and all(isinstance(v, Mapping) for v in value):
            tree(group(parent, name, "NXcollection"), table(value))
        else:
            put(parent, name, value)


def table(rows: Sequence[Body]) -> dict[str, list[Any]]:
    """Rows of JSON objects as columns of those keys that hold a plain number or string in some row."""
    keys = dict.fromkeys(key for row in rows for key in row)
    listed = {key: [row.get(key) for row in rows] for key in keys}
    return {key: values for key, values in listed.items() if _is_column(values)}


class PointWriter:
    """The scan: one growing dataset a column of `export_columns.COLUMNS`."""

    def __init__(self, parent: h5py.Group) -> None:
        self._datasets = {name: self._column(parent, name) for name in COLUMNS}
        self._rows: list[tuple[int, int, Body]] = []
        self.count = 0

    def add(self, seq: int, session: int, body: Body) -> None:
        """Raises ValueError (now or at `flush`) if the point does not fit its columns."""
        self._rows.append((seq, session, body))
        if len(self._rows) == _BLOCK:
            self.flush()

    def flush(self) -> None:
        rows, self._rows = self._rows, []
        start, self.count = self.count, self.count + len(rows)
        for name, values in columns(rows).items() if rows else ():
            self._datasets[name].resize((self.count,))
            self._datasets[name][start:] = values

    def _column(self, parent: h5py.Group, name: str) -> h5py.Dataset:
        sample = columns([])[name]
        dtype = _TEXT if sample.dtype == object else sample.dtype
        made = _growing(parent, name, dtype)
        units = unit_of(name)
        if units is not None:
            made.attrs["units"] = units
        return made


class EventWriter:
    """All records but the points: number, kind, body as the journal has it."""

    def __init__(self, parent: h5py.Group) -> None:
        self._seq = _growing(parent, "seq", np.dtype(np.int64))
        self._kind = _growing(parent, "kind", _TEXT)
        self._body = _growing(parent, "body", _TEXT)
        self._rows: list[tuple[Record, str]] = []
        self.count = 0

    def add(self, record: Record, text: str) -> None:
        self._rows.append((record, text))
        if len(self._rows) == _BLOCK:
            self.flush()

    def flush(self) -> None:
        rows, self._rows = self._rows, []
        start, self.count = self.count, self.count + len(rows)
        values = (
            (self._seq, np.array([record.seq for record, _ in rows], dtype=np.int64)),
            (self._kind, np.array([record.kind for record, _ in rows], dtype=object)),
            (self._body, np.array([text for _, text in rows], dtype=object)),
        )
        for dataset, column in values if rows else ():
            dataset.resize((self.count,))
            dataset[start:] = column


def _growing(parent: h5py.Group, name: str, dtype: np.dtype[Any]) -> h5py.Dataset:
    # numbers only: HDF5 keeps the characters of strings elsewhere, where a filter does not reach
    filters = {} if dtype is _TEXT else {"compression": "gzip", "compression_opts": 4, "shuffle": True}
    chunk = 256 if dtype is _TEXT else _BLOCK
    return parent.create_dataset(
        name, shape=(0,), maxshape=(None,), chunks=(chunk,), dtype=dtype, track_times=False, **filters
    )


def _storable(value: Any) -> tuple[Any, np.dtype[Any]]:
    if isinstance(value, str):
        return value, _TEXT
    if isinstance(value, np.ndarray):
        return value, value.dtype
    if isinstance(value, (list, tuple)):
        flat = _flatten(value)
        if flat and all(isinstance(item, str) or item is None for item in flat) and any(flat):
            return np.array([item or "" for item in flat], dtype=object), _TEXT
        if flat and all(type(item) is int for item in flat):
            return np.array(value, dtype=np.int64), np.dtype(np.int64)
        return np.array(value, dtype=np.float64), np.dtype(np.float64)  # None becomes NaN
    if isinstance(value, bool):
        return np.int8(value), np.dtype(np.int8)
    return (np.int64(value), np.dtype(np.int64)) if isinstance(value, int) else (value, np.dtype(np.float64))


def _flatten(value: Any) -> list[Any]:
    return (
        [leaf for item in value for leaf in _flatten(item)] if isinstance(value, (list, tuple)) else [value]
    )


def _is_column(values: list[Any]) -> bool:
    present = [value for value in values if value is not None]
    plain = all(isinstance(v, (bool, int, float)) for v in present) or all(
        isinstance(v, str) for v in present
    )
    return bool(present) and plain
