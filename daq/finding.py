"""A finding: one thing that is wrong, doubtful or worth knowing about a bench or a target, with what to
do."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

Severity = Literal["problem", "caution", "note"]
SEVERITIES: tuple[Severity, ...] = ("problem", "caution", "note")


@dataclass(frozen=True, slots=True)
class Finding:
    """`problem`: a run would be refused, or worthless. `caution`: it may mislead. `note`: good to know.

    `key` is the settings key it is about, as in "sweep.step_pm"; `file` the kind of file that key stands in.
    """

    severity: Severity
    file: Literal["bench", "target"]
    key: str
    text: str

    def __str__(self) -> str:
        of_bench = "bench file, " if self.file == "bench" else ""
        return f"{of_bench}{self.key}: {self.text}"


def worst_first(findings: Iterable[Finding]) -> list[Finding]:
    """Problems, then cautions, then notes; each in the order they were found."""
    return sorted(findings, key=lambda finding: SEVERITIES.index(finding.severity))
