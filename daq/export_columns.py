"""Points as columns: the one table that says how a point record stands in a run file, and back again."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.records import Body

INTEGERS = (
    "at_ns", "end_ns", "sweep", "index", "group", "steps", "reported_steps", "counts", "gate_ns", "gates",
)  # fmt: skip
"""Keys of a point whose values are integers."""

SWITCHES = ("light", "complete")
"""Keys whose values are true or false; 1 and 0 in the file."""

AMBIENT = ("temperature_c", "pressure_pa", "humidity_percent")
"""Keys of a point's `ambient`, which may be absent; NaN stands for what was not read (JSON has no NaN)."""

REFERENCE = "reference_counts"
"""Key of a point on a bench with a reference detector; NOT_COUNTED stands where there is none."""

NOT_COUNTED = -1

COLUMNS = ("seq", "session", *INTEGERS, *SWITCHES, REFERENCE, "flags", *AMBIENT)
"""Columns of a run file's scan: record number, number of the session, then the point itself."""

_KEYS = frozenset((*INTEGERS, *SWITCHES, REFERENCE, "flags", "ambient"))
_NEEDED = _KEYS - {"ambient", REFERENCE}

Columns = dict[str, NDArray[Any]]


def columns(rows: Sequence[tuple[int, int, Body]]) -> Columns:
    """Columns (N,) of N points given as (seq, session, body): int64, int8, float64; flags as objects.

    Raises ValueError naming record and key if a point holds something that no column can take without loss.
    """
    for seq, _, body in rows:
        _check(seq, body)
    bodies = [body for _, _, body in rows]
    table: Columns = {
        "seq": np.array([seq for seq, _, _ in rows], dtype=np.int64),
        "session": np.array([session for _, session, _ in rows], dtype=np.int64),
        "flags": np.array([",".join(body["flags"]) for body in bodies], dtype=object),
    }
    for key in INTEGERS:
        table[key] = np.array([body[key] for body in bodies], dtype=np.int64)
    for key in SWITCHES:
        table[key] = np.array([body[key] for body in bodies], dtype=np.int8)
    table[REFERENCE] = np.array([body.get(REFERENCE, NOT_COUNTED) for body in bodies], dtype=np.int64)
    for key in AMBIENT:
        table[key] = np.array([_reading(body, key) for body in bodies], dtype=np.float64)
    return table


def bodies(table: Mapping[str, NDArray[Any]]) -> Iterator[dict[str, Any]]:
    """The points of `columns` back, in order."""
    lists = {name: table[name].tolist() for name in COLUMNS}
    for row in zip(*(lists[name] for name in COLUMNS), strict=True):
        point = dict(zip(COLUMNS, row, strict=True))
        body: dict[str, Any] = {key: point[key] for key in INTEGERS}
        body |= {key: bool(point[key]) for key in SWITCHES}
        if point[REFERENCE] != NOT_COUNTED:
            body[REFERENCE] = point[REFERENCE]
        body["flags"] = point["flags"].split(",") if point["flags"] else []
        ambient = {key: None if point[key] != point[key] else point[key] for key in AMBIENT}
        if any(value is not None for value in ambient.values()):
            body["ambient"] = ambient
        yield body


def _check(seq: int, body: Body) -> None:
    if not _NEEDED <= body.keys() <= _KEYS:
        odd = sorted((body.keys() - {"ambient", REFERENCE}) ^ _NEEDED)
        raise ValueError(f"record {seq} (point): keys {odd} are missing or have no column in a run file")
    for key in INTEGERS:
        if type(body[key]) is not int or not -(2**63) <= body[key] < 2**63:
            raise ValueError(
                f"record {seq} (point): {key} must be a whole number of 64 bits, not {body[key]!r}"
            )
    reference = body.get(REFERENCE, 0)
    if type(reference) is not int or not 0 <= reference < 2**63:
        raise ValueError(f"record {seq} (point): {REFERENCE} must be a whole number, not {reference!r}")
    for key in SWITCHES:
        if type(body[key]) is not bool:
            raise ValueError(f"record {seq} (point): {key} must be true or false, not {body[key]!r}")
    flags = body["flags"]
    if type(flags) is not list or not all(type(f) is str and f and "," not in f for f in flags):
        raise ValueError(f"record {seq} (point): flags must be a list of words, not {flags!r}")
    ambient = body.get("ambient")
    if ambient is not None and ambient.keys() != set(AMBIENT):
        raise ValueError(f"record {seq} (point): ambient must hold {', '.join(AMBIENT)}, not {ambient!r}")


def _reading(body: Body, key: str) -> float:
    ambient = body.get("ambient")
    value = None if ambient is None else ambient[key]
    return float("nan") if value is None else float(value)
