"""The words of the journal: record kinds, stop reasons, run identities.

Everything that decides a run is one of these records, in one order. A body is plain JSON; times in it are
integer nanoseconds since the session began (`at_ns`), counts and steps are integers.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from enum import StrEnum
from typing import Any

FORMAT = 2
"""Version of journal heads and run files. 1 had neither settled darks nor a reference and is not read."""

Body = Mapping[str, Any]


def other_format(found: int) -> str:
    """What to say of a journal or file of another version."""
    age = "a newer" if found > FORMAT else "an older"
    return f"written by {age} gratingd: format {found}, this one reads {FORMAT}; use {age} gratingd"


class Kind(StrEnum):
    """The closed list of record kinds. A reader refuses a journal that holds any other."""

    HEAD = "head"
    SESSION = "session"
    PREPARED = "prepared"
    POINT = "point"
    HALTED = "halted"
    WISH = "wish"
    DEADLINE = "deadline"
    LOOK = "look"
    FAULT = "fault"
    SAFE = "safe"
    CONCLUSION = "conclusion"


KINDS = frozenset(Kind)


class StopReason(StrEnum):
    """Why a run ended. Closed: whatever happens is one of these."""

    GOAL_REACHED = "goal-reached"
    TIME_LIMIT = "time-limit"
    LIGHT_LIMIT = "light-limit"
    CONFLICT = "conflict"
    STOPPED_BY_USER = "stopped-by-user"
    DEADLINE = "deadline"
    NIGHT_DEADLINE = "night-deadline"
    NOT_AS_STATED = "not-as-stated"
    FAULT = "fault"
    OVER_LIGHT = "over-light"
    INTERNAL_ERROR = "internal-error"
    INTERRUPTED = "interrupted"


@dataclass(frozen=True, slots=True)
class Record:
    """One row of a journal."""

    seq: int
    kind: str
    body: dict[str, Any]


def utc_ns_of(moment: datetime) -> int:
    """Nanoseconds since 1970-01-01T00:00:00Z, exact to the microsecond."""
    return (moment - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1) * 1000


def utc_stamp(utc_ns: int) -> str:
    """`20310211T180000Z`: seconds are enough for a name."""
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=utc_ns // 1000)
    return moment.strftime("%Y%m%dT%H%M%SZ")


def run_identity(
    *,
    night_start_utc_ns: int,
    bench_slug: str,
    ordinal: int,
    target_slug: str,
    serial_slug: str = "",
    attempt: int,
) -> str:
    """A run's name, and that of its files: start of its night, bench, place in the night, target, serial of
    the specimen where there is one, attempt. Nothing in it is random."""
    parts = [
        utc_stamp(night_start_utc_ns),
        bench_slug,
        f"{ordinal:02d}",
        target_slug,
        serial_slug,
        str(attempt),
    ]
    return "-".join(part for part in parts if part)
