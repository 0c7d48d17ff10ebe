"""The program: `gratingd`, or `python -P -m daq`. The guard looks at the packages first."""

from __future__ import annotations

from daq import guard


def main() -> None:
    """The console script."""
    guard.check()
    from daq.cli import main as command_line

    command_line()


if __name__ == "__main__":
    main()
