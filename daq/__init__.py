"""The daemon: settings of targets and nights, the run machine, hands, runner, journal, files, commands."""
