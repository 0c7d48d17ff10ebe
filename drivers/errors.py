"""Typed errors, classed by what the caller must do about them.

| class           | what the caller does                                         |
|-----------------|--------------------------------------------------------------|
| LinkError       | reconnect, then repeat                                       |
| ReplyError      | resynchronise, then repeat                                   |
| LimitError      | nothing: the request was wrong, repeating cannot help        |
| HardwareFault   | stop safely                                                  |
| Halted          | nothing: somebody asked for the halt                         |
| SettingsError   | tell the user: file, key, value, what is allowed             |
"""

from __future__ import annotations


class GratingdError(Exception):
    """Base of every error this project raises on purpose."""


class DeviceError(GratingdError):
    """Something went wrong at one device; `device` names it, `repeat` says whether repeating can help."""

    repeat: bool = False

    def __init__(self, device: str, text: str) -> None:
        super().__init__(f"{device}: {text}")
        self.device = device
        self.text = text


class LinkError(DeviceError):
    """The link is down, or its deadline passed; reconnect and repeat."""

    repeat = True


class ReplyError(DeviceError):
    """A reply was garbled, partial or late; resynchronise and repeat."""

    repeat = True


class LimitError(DeviceError):
    """A request beyond what the device is allowed to do; never repeated."""


class HardwareFault(DeviceError):
    """The device reports that it is broken, stalled, at a limit switch or overloaded; stop safely."""


class OverLight(HardwareFault):
    """The detector saw more light than it may; the shutter is to be closed at once."""


class Halted(DeviceError):
    """A move or a dwell ended early because a halt was asked for."""


class SettingsError(GratingdError):
    """One or more mistakes in a settings file. `problems` holds one line each, ready to print."""

    def __init__(self, file: str, problems: list[str]) -> None:
        self.file = file
        self.problems = problems
        super().__init__("\n".join(f"{file}: {p}" for p in problems))


class DataError(GratingdError):
    """A measured file cannot be used; the text names the file, the place and what is allowed."""
