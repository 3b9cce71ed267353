"""One simulated instrument behind HiSLIP (IVI-6.1), as far as a controller needs it.

A client has two connections: the synchronous one carries messages and replies, each reply with
the id of the message that it answers; the asynchronous one carries device clear and the
status byte. Only the synchronized mode is spoken: a new message drops an unread reply.
"""

import struct
from contextlib import suppress
from dataclasses import dataclass, field

import trio

from ohmward.sim.device import Device
from ohmward.sim.socket_port import LOOPBACK, BenchClock, drop

_HEADER = struct.Struct("!2sBBIQ")
_PROLOGUE = b"HS"
PROTOCOL_VERSION = 0x0100
LARGEST_MESSAGE = 1 << 20
_SERVER_ID = 0x4F57  # two letters of our own, as the standard asks for

INITIALIZE, INITIALIZE_RESPONSE = 0, 1
FATAL_ERROR, ERROR = 2, 3
ASYNC_LOCK, ASYNC_LOCK_RESPONSE = 4, 5
DATA, DATA_END = 6, 7
DEVICE_CLEAR_COMPLETE, DEVICE_CLEAR_ACKNOWLEDGE = 8, 9
REMOTE_LOCAL, REMOTE_LOCAL_RESPONSE = 10, 11
TRIGGER = 12
ASYNC_MAX_SIZE, ASYNC_MAX_SIZE_RESPONSE = 15, 16
ASYNC_INITIALIZE, ASYNC_INITIALIZE_RESPONSE = 17, 18
ASYNC_DEVICE_CLEAR = 19
ASYNC_STATUS_QUERY, ASYNC_STATUS_RESPONSE = 21, 22
ASYNC_DEVICE_CLEAR_ACKNOWLEDGE = 23
ASYNC_LOCK_INFO, ASYNC_LOCK_INFO_RESPONSE = 24, 25

POORLY_FORMED, NO_BOTH_CHANNELS, WRONG_INITIALIZATION = 1, 2, 3
UNRECOGNIZED_TYPE = 1


@dataclass(frozen=True, slots=True)
class Message:
    """One HiSLIP message."""

    kind: int
    control: int = 0
    parameter: int = 0
    payload: bytes = b""

    def encode(self) -> bytes:
        """Header and payload."""
        header = _HEADER.pack(_PROLOGUE, self.kind, self.control, self.parameter, len(self.payload))
        return header + self.payload


class BrokenProtocolError(Exception):
    """What came is no HiSLIP; ``code`` is the fatal error's."""

    def __init__(self, code: int) -> None:
        super().__init__(f"fatal error {code}")
        self.code = code


class Channel:
    """One of the two connections of a client."""

    def __init__(self, stream: trio.SocketStream) -> None:
        self.stream = stream
        self._received = bytearray()
        self._sending = trio.Lock()

    async def receive(self) -> Message | None:
        """The next message; None when the client has left. Cancelling loses nothing."""
        while True:
            message = self._whole()
            if message is not None:
                return message
            chunk = await self.stream.receive_some(65536)
            if not chunk:
                return None
            self._received += chunk

    def _whole(self) -> Message | None:
        if len(self._received) < _HEADER.size:
            return None
        prologue, kind, control, parameter, length = _HEADER.unpack_from(self._received)
        if prologue != _PROLOGUE or length > LARGEST_MESSAGE:
            raise BrokenProtocolError(POORLY_FORMED)
        end = _HEADER.size + length
        if len(self._received) < end:
            return None
        payload = bytes(self._received[_HEADER.size : end])
        del self._received[:end]
        return Message(kind, control, parameter, payload)

    async def send(self, message: Message) -> None:
        """Send one whole message."""
        async with self._sending:
            await self.stream.send_all(message.encode())


@dataclass(slots=True)
class _Client:
    number: int
    scope: trio.CancelScope
    channel: Channel
    asynchronous: Channel | None = None
    message: bytearray = field(default_factory=bytearray)
    message_id: int = 0
    clearing: bool = False


class HislipPort:
    """The HiSLIP port of one instrument; one client at a time, the newest."""

    def __init__(self, device: Device, clock: BenchClock) -> None:
        self._device = device
        self._clock = clock
        self._client: _Client | None = None
        self._number = 0

    async def listen(
        self, port: int, task_status: trio.TaskStatus[int] = trio.TASK_STATUS_IGNORED
    ) -> None:
        """Accept clients until cancelled; starts with the number of the port."""
        (listener,) = await trio.open_tcp_listeners(port, host=LOOPBACK)
        async with listener, trio.open_nursery() as nursery:
            task_status.started(listener.socket.getsockname()[1])
            while True:
                stream = await listener.accept()
                if self._device.refuses(self._clock.now_s()):
                    drop(stream)
                else:
                    nursery.start_soon(self._greet, stream)

    async def _greet(self, stream: trio.SocketStream) -> None:
        """Serve one connection, whichever of the two it is."""
        channel = Channel(stream)
        gone = suppress(trio.BrokenResourceError, trio.ClosedResourceError)
        try:
            with gone:
                await self._welcome(channel)
        except BrokenProtocolError as error:
            with gone, trio.move_on_after(1.0):
                await channel.send(Message(FATAL_ERROR, error.code))
        finally:
            drop(stream)

    async def _welcome(self, channel: Channel) -> None:
        """The first message says which of the two connections this is."""
        first = await channel.receive()
        if first is None:
            return
        if first.kind == INITIALIZE:
            await self._talk(channel)
        elif first.kind == ASYNC_INITIALIZE:
            await self._attend(channel, first.parameter)
        else:
            raise BrokenProtocolError(WRONG_INITIALIZATION)

    # -- the synchronous connection

    async def _talk(self, channel: Channel) -> None:
        if self._client is not None:
            self._client.scope.cancel()
        self._number = self._number % 0xFFFF + 1
        client = self._client = _Client(self._number, trio.CancelScope(), channel)
        try:
            with client.scope:
                self._device.message_based = True
                self._device.opened(self._clock.now_s())
                parameter = PROTOCOL_VERSION << 16 | client.number
                await channel.send(Message(INITIALIZE_RESPONSE, 0, parameter))
                await self._exchange(client)
        finally:
            if client.asynchronous is not None:
                drop(client.asynchronous.stream)
            if self._client is client:
                self._client = None

    async def _exchange(self, client: _Client) -> None:
        device, clock = self._device, self._clock
        while True:
            data = b"" if client.clearing else device.take(clock.now_s())
            due_s = device.due_s()
            if data:
                kind = DATA if due_s is not None else DATA_END
                await client.channel.send(Message(kind, 0, client.message_id, data))
            if device.hung_up(clock.now_s()):
                return
            deadline_s = clock.real_s(due_s) if due_s is not None else float("inf")
            with trio.move_on_at(deadline_s) as waiting:
                message = await client.channel.receive()
            if waiting.cancelled_caught:
                continue
            if message is None:
                return
            await self._take(client, message)

    async def _take(self, client: _Client, message: Message) -> None:
        now_s = self._clock.now_s()
        if message.kind in (DATA, DATA_END):
            if client.asynchronous is None:
                raise BrokenProtocolError(NO_BOTH_CHANNELS)
            client.message += message.payload
            if message.kind == DATA_END:
                whole, client.message = bytes(client.message), bytearray()
                client.message_id = message.parameter
                self._device.receive(whole if whole.endswith(b"\n") else whole + b"\n", now_s)
        elif message.kind == TRIGGER:
            client.message_id = message.parameter
            self._device.receive(b"*TRG\n", now_s)
        elif message.kind == DEVICE_CLEAR_COMPLETE:
            client.clearing = False
            client.message.clear()
            await client.channel.send(Message(DEVICE_CLEAR_ACKNOWLEDGE))
        else:
            await client.channel.send(Message(ERROR, UNRECOGNIZED_TYPE))

    # -- the asynchronous connection

    async def _attend(self, channel: Channel, number: int) -> None:
        client = self._client
        if client is None or client.number != number or client.asynchronous is not None:
            raise BrokenProtocolError(WRONG_INITIALIZATION)
        client.asynchronous = channel
        await channel.send(Message(ASYNC_INITIALIZE_RESPONSE, 0, _SERVER_ID))
        while (message := await channel.receive()) is not None:
            await channel.send(self._answer(client, message))
        client.scope.cancel()  # a client without its second connection is gone

    def _answer(self, client: _Client, message: Message) -> Message:
        now_s = self._clock.now_s()
        kind = message.kind
        if kind == ASYNC_MAX_SIZE:
            return Message(ASYNC_MAX_SIZE_RESPONSE, 0, 0, struct.pack("!Q", LARGEST_MESSAGE))
        if kind == ASYNC_STATUS_QUERY:
            return Message(ASYNC_STATUS_RESPONSE, self._device.status_byte(now_s))
        if kind == ASYNC_DEVICE_CLEAR:
            client.clearing = True
            self._device.clear(now_s)
            return Message(ASYNC_DEVICE_CLEAR_ACKNOWLEDGE)
        if kind == ASYNC_LOCK:
            return Message(ASYNC_LOCK_RESPONSE, 1)
        if kind == ASYNC_LOCK_INFO:
            return Message(ASYNC_LOCK_INFO_RESPONSE)
        if kind == REMOTE_LOCAL:
            return Message(REMOTE_LOCAL_RESPONSE)
        return Message(ERROR, UNRECOGNIZED_TYPE)
