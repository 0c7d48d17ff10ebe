"""The table a night ends with."""

from __future__ import annotations

import io
import textwrap
from collections.abc import Mapping, Sequence
from typing import Any, Literal

from rich.console import Console
from rich.table import Table

from analysis.digits import NOTHING, with_uncertainty
from daq.wording import duration

WIDTH = 110


def runs_table(runs: Sequence[Mapping[str, Any]]) -> str:
    """Verdicts in plain text, no colour codes: it goes into mails and log books."""
    table = Table(box=None, padding=(0, 2, 0, 0), pad_edge=False, header_style="")
    columns = ("target", "verdict", "separation, pm", "ratio", "stopped", "bench time", "points")
    for column in columns:
        justify: Literal["left", "right"] = "right" if column == "points" else "left"
        table.add_column(column, justify=justify, no_wrap=column != "target")
    for run in runs:
        table.add_row(
            run["target"],
            run["verdict"],
            with_uncertainty(run["separation_pm"], run["separation_u_pm"]),
            with_uncertainty(run["ratio"], run["ratio_u"]),
            run["stop_reason"] or NOTHING,
            duration(run["bench_time_s"]),
            str(run["points"]),
        )
    stream = io.StringIO()
    console = Console(file=stream, width=WIDTH, color_system=None, highlight=False, markup=False)
    console.print(table)
    for run in runs:
        cause = run.get("cause")
        for sentence in [*([f"stopped by a fault: {cause}"] if cause else []), *run["evidence"]]:
            told = textwrap.wrap(f"{run['target']}: {sentence}", WIDTH, subsequent_indent="  ")
            console.print("\n".join(told))
    media = sorted({run["medium"] for run in runs})
    console.print(f"Separations in {' and '.join(media)}; ± is one standard uncertainty." if media else "")
    folders = sorted({run["file"].rpartition("/")[0] for run in runs if run["stop_reason"] and run["file"]})
    for folder in folders:
        console.print(f"Files in {folder}", soft_wrap=True)
    return "\n".join(line.rstrip() for line in stream.getvalue().rstrip().splitlines())
