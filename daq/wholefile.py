"""A file that stands as a whole or not at all, whatever happens while it is written."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

from daq.journal import fsync_folder


def write_whole(path: Path, data: bytes, *, check: Callable[[Path], None] | None = None) -> None:
    """Write beside `path`, make it durable, then put it in its place; an older file stands until then.

    check : looks at the new file before it takes its place; what it raises leaves the old one. OSError
    where the folder cannot be written.
    """
    temporary = path.with_name(f"{path.name}.tmp-{os.getpid()}")
    try:
        with temporary.open("wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        if check is not None:
            check(temporary)
        os.replace(temporary, path)
        fsync_folder(path.parent)
    finally:
        temporary.unlink(missing_ok=True)
