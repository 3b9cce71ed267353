"""One simulated instrument behind a raw TCP socket of this machine, and the clock of its bench."""

import socket
import struct

import trio

from ohmward.sim.device import Device

LOOPBACK = "127.0.0.1"
_CHUNK = 65536
_RESET_ON_CLOSE = struct.pack("ii", 1, 0)


class BenchClock:
    """Seconds since the bench was switched on; ``speed`` bench seconds pass in one real second."""

    def __init__(self, speed: float = 1.0) -> None:
        if not speed > 0.0:
            raise ValueError("speed is above zero")
        self._speed = speed
        self._started_s = trio.current_time()

    def now_s(self) -> float:
        """The time on the bench."""
        return (trio.current_time() - self._started_s) * self._speed

    def real_s(self, bench_s: float) -> float:
        """The time of trio's clock at an instant on the bench."""
        return self._started_s + bench_s / self._speed


class SocketPort:
    """The TCP port of one instrument."""

    def __init__(self, device: Device, clock: BenchClock) -> None:
        self._device = device
        self._clock = clock
        self._present: trio.CancelScope | None = None

    async def listen(
        self, port: int, task_status: trio.TaskStatus[int] = trio.TASK_STATUS_IGNORED
    ) -> None:
        """Accept connections until cancelled; starts with the number of the port."""
        (listener,) = await trio.open_tcp_listeners(port, host=LOOPBACK)
        async with listener, trio.open_nursery() as nursery:
            task_status.started(listener.socket.getsockname()[1])
            while True:
                stream = await listener.accept()
                if self._device.refuses(self._clock.now_s()):
                    drop(stream)
                    continue
                if self._present is not None:
                    self._present.cancel()
                self._present = trio.CancelScope()
                nursery.start_soon(self._talk, stream, self._present)

    async def _talk(self, stream: trio.SocketStream, scope: trio.CancelScope) -> None:
        """One controller, until it leaves, is replaced or is hung up on."""
        try:
            with scope:
                self._device.message_based = False
                self._device.opened(self._clock.now_s())
                await self._exchange(stream)
                await stream.aclose()
        except (trio.BrokenResourceError, trio.ClosedResourceError):
            pass  # the controller is gone
        finally:
            if self._present is scope:
                self._present = None
            drop(stream)

    async def _exchange(self, stream: trio.SocketStream) -> None:
        device, clock = self._device, self._clock
        left = False
        while True:
            data = device.take(clock.now_s())
            if data:
                await stream.send_all(data)
            if device.hung_up(clock.now_s()):
                drop(stream)
                return
            due_s = device.due_s()
            if left and due_s is None:
                return
            deadline_s = clock.real_s(due_s) if due_s is not None else float("inf")
            if left:  # it says no more, and yet may wait for what it has asked
                await trio.sleep_until(deadline_s)
                continue
            with trio.move_on_at(deadline_s):
                received = await stream.receive_some(_CHUNK)
                left = not received
                device.receive(bytes(received), clock.now_s())


def drop(stream: trio.SocketStream) -> None:
    """Close at once; what is still on its way is lost, as when a cable is pulled."""
    if stream.socket.fileno() < 0:
        return  # closed in order already
    stream.socket.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, _RESET_ON_CLOSE)
    stream.socket.close()
