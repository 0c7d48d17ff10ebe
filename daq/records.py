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

FORMAT = 1
"""Version of journal heads, run files and settings files; readers accept it and (from 2 on) the last."""

Body = Mapping[str, Any]


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
    NIGHT_DEADLINE = "night-deadline"
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


def utc_stamp(utc_ns: int) -> str:
    """`20310211T180000Z`: seconds are enough for a name."""
    moment = datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=utc_ns // 1000)
    return moment.strftime("%Y%m%dT%H%M%SZ")


def run_identity(*, night_start_utc_ns: int, ordinal: int, target_slug: str, attempt: int) -> str:
    """A run's name: start of its night, place in it, target, attempt. Nothing in it is random."""
    return f"{utc_stamp(night_start_utc_ns)}-{ordinal:02d}-{target_slug}-{attempt}"
