"""One simulated instrument behind a pseudo-terminal, which is a serial line to everybody else.

A terminal does not tell when somebody opens it, so that the instrument sees one connection that
never ends, as a real one on a serial cable does.
"""

import os
import tty

import trio

from ohmward.sim.device import Device
from ohmward.sim.socket_port import BenchClock

_CHUNK = 4096


class SerialPort:
    """The serial line of one instrument."""

    def __init__(self, device: Device, clock: BenchClock) -> None:
        self._device = device
        self._clock = clock

    async def listen(self, task_status: trio.TaskStatus[str] = trio.TASK_STATUS_IGNORED) -> None:
        """Talk until cancelled; starts with the path of the terminal."""
        ours, theirs = os.openpty()
        try:
            tty.setraw(theirs)  # and kept open: else reading fails whenever nobody else has it
            async with trio.lowlevel.FdStream(ours) as stream:
                task_status.started(os.ttyname(theirs))
                self._device.message_based = False
                self._device.opened(self._clock.now_s())
                await self._exchange(stream)
        finally:
            os.close(theirs)

    async def _exchange(self, stream: trio.lowlevel.FdStream) -> None:
        device, clock = self._device, self._clock
        while True:
            data = device.take(clock.now_s())
            if data:
                await stream.send_all(data)
            due_s = device.due_s()
            deadline_s = clock.real_s(due_s) if due_s is not None else float("inf")
            with trio.move_on_at(deadline_s):
                received = await stream.receive_some(_CHUNK)
                device.receive(bytes(received), clock.now_s())
