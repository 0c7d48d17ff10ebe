"""Fault scripts: the nth call of one method of one device goes wrong, on purpose.

    [[world.options.faults]]
    device = "drive"     # the device's place in the bench file
    call = "move_to"     # the method of its protocol
    nth = 5              # the first call that fails, counted from 1
    kind = "link"
    times = 1            # how many calls in a row fail
    after_s = 0.0        # time that passes in the call before it fails

`kind` is one of link (LinkError), reply (ReplyError), hardware (HardwareFault), over-light (OverLight),
crash (RuntimeError: a defect in a driver, which nobody announced) and hang (no answer until the call's
deadline has passed, then LinkError).
"""

from __future__ import annotations

import asyncio
from collections import Counter
from typing import Literal

from pydantic import Field

from drivers.errors import DeviceError, HardwareFault, LinkError, OverLight, ReplyError
from drivers.settings import StrictModel

_ERRORS: dict[str, tuple[type[DeviceError], str]] = {
    "link": (LinkError, "the link went down"),
    "reply": (ReplyError, "the reply was garbled"),
    "hardware": (HardwareFault, "the device reports a fault"),
    "over-light": (OverLight, "more light than the detector may see"),
}


class Fault(StrictModel):
    """One line of a fault script."""

    device: Literal[
        "drive", "detector", "shutter", "ambient", "filter", "lamp", "slits", "reference", "attenuator"
    ]
    call: Literal[
        "identify",
        "close",
        "home",
        "move_to",
        "halt",
        "gate",
        "measure",
        "set_open",
        "read",
        "select",
        "set_widths",
    ]
    nth: int = Field(ge=1)
    kind: Literal["link", "reply", "hardware", "over-light", "crash", "hang"]
    times: int = Field(default=1, ge=1)
    after_s: float = Field(default=0.0, ge=0.0, le=3600.0)


class FaultScript:
    """Counts every call of every device and makes the scripted ones fail."""

    def __init__(self, faults: list[Fault]) -> None:
        self._faults = faults
        self._calls: Counter[tuple[str, str]] = Counter()

    def calls(self, device: str, call: str) -> int:
        """How often that method was called so far."""
        return self._calls[device, call]

    async def pass_or_fail(self, device: str, call: str, *, deadline_s: float = 1.0) -> None:
        """To be awaited at the start of every driver call; raises what the script says for this one."""
        self._calls[device, call] += 1
        if not self._faults:
            return
        number = self._calls[device, call]
        for fault in self._faults:
            if (fault.device, fault.call) == (device, call) and 0 <= number - fault.nth < fault.times:
                await self._fail(fault, device, f"{call} (call {number})", deadline_s)

    async def _fail(self, fault: Fault, device: str, where: str, deadline_s: float) -> None:
        if fault.kind == "hang":
            await asyncio.sleep(deadline_s)
            raise LinkError(device, f"no answer within {deadline_s:g} s in {where}")
        if fault.after_s:
            await asyncio.sleep(fault.after_s)
        if fault.kind == "crash":
            raise RuntimeError(f"{device}: scripted crash in {where}")
        error, text = _ERRORS[fault.kind]
        raise error(device, f"{text} in {where}")
