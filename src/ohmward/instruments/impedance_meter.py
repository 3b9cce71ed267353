"""The impedance meter: points set with read-back, readings that are numbers only when good."""

from collections.abc import Awaitable, Callable, Mapping
from math import isclose, nan
from typing import TypeVar

from ohmward.errors import (
    InstrumentRefused,
    LinkError,
    LinkLost,
    LinkTimeout,
    ReplyMalformed,
    WrongIdentity,
)
from ohmward.instruments.talker import Talker
from ohmward.protocol.codec import Value
from ohmward.setup.driver_commands import Setting
from ohmward.terms.condition import Point
from ohmward.terms.reading import ImpedanceReading
from ohmward.terms.status import Status

T = TypeVar("T")

TRIES = 3
"""How often a setting is tried anew over a link that faults in between."""

CORRECTIONS = ("correction_open", "correction_short", "correction_load")

# A bias of one kind must be off before the other kind is on.
_OUTPUT = {"bias_voltage": "bias_voltage_output", "bias_current": "bias_current_output"}


class ImpedanceMeter:
    """One impedance meter. What was set is remembered until its link has faulted.

    After a fault the instrument may be another state: it may have been switched off and on.
    All that was asked for is then set and read back again before the next reading.
    """

    def __init__(self, talker: Talker, *, cable_m: float | None = None) -> None:
        self._talker = talker
        self._cable_m = cable_m
        self._set: dict[str, Value] = {}
        self._preparation: dict[str, Value] = {}
        self._point: Point | None = None
        self._standing = True
        self._beyond_recovery = False
        self._recoveries = talker.link.recoveries
        self._bias: dict[str, Value | None] = {}
        self._confirmed_at = -1
        self._pair = talker.driver.meter.pair if talker.driver.meter else ""
        self._integration = ""
        self._query, self._layout = talker.reading("impedance")
        self._reported = {one.name for one in talker.driver.reading["impedance"].fields}
        self._sees = bool(self._reported & {"pair", "frequency_hz"})
        self._asked_pair: str | None = None
        self._stated_timeout_s = talker.driver.reading["impedance"].timeout
        self._timeout_s = self._stated_timeout_s or talker.driver.link.timeout
        self._ranges: dict[Value, str] = {}

    @property
    def limits(self) -> Mapping[str, Setting]:
        """The driver's settings by name, with the limits and allowed values of each."""
        return self._talker.driver.setting

    @property
    def bias_is_off(self) -> bool:
        """Whether every bias that the meter has was last confirmed to be 0 or off.

        False before anything was confirmed, and while a command that may have been carried
        out has not been confirmed.
        """
        return all(
            self._bias.get(bias) == 0.0 or self._bias.get(output) is False
            for bias, output in _OUTPUT.items()
            if self._talker.can_set(bias)
        )

    # --- preparing ---

    async def prepare(
        self, *, pair: str | None, integration: str, range_ohm: float | None
    ) -> dict[str, str]:
        """Set the pair, integration and range for what follows; return all that is set.

        The answer names each setting as the meter confirms it, its own corrections and cable
        length included: what is recorded with the readings. Raises InstrumentRefused.
        """
        self._preparation = self._prepared(pair, integration, range_ohm)
        self._integration = integration
        self._asked_pair = pair
        self._point = None
        self._forget()
        if self._talker.codec.unasked:
            # a message that is on its way was measured before: on another part, maybe
            self._talker.discards = max(self._talker.discards, 1)
        return await self._persist(self._prepare, restore=False)

    def _prepared(
        self, pair: str | None, integration: str, range_ohm: float | None
    ) -> dict[str, Value]:
        can_set = self._talker.can_set
        wanted: dict[str, Value] = {}
        if can_set("pair"):
            words = self.limits["pair"].words
            self._pair = pair or ("R-X" if "R-X" in words else next(iter(words), ""))
            wanted["pair"] = self._pair
        elif pair and pair != self._pair and "pair" not in self._reported:
            raise InstrumentRefused(f"the meter sends {self._pair or 'no pair known'}, not {pair}")
        if can_set("integration"):
            wanted["integration"] = integration
        if range_ohm is not None:
            if not can_set("range"):
                raise InstrumentRefused("the driver has no setting for the range")
            if can_set("range_automatic"):
                wanted["range_automatic"] = False
            wanted["range"] = range_ohm
        elif can_set("range_automatic"):
            wanted["range_automatic"] = True
        if self._cable_m is not None and can_set("cable_length"):
            wanted["cable_length"] = self._cable_m
        return wanted

    async def _prepare(self) -> dict[str, str]:
        talker = self._talker
        found = await talker.set_all(self._preparation)
        for name in (*CORRECTIONS, "cable_length"):
            if name not in found and talker.can_set(name) and self.limits[name].ask:
                found[name] = await talker.read_back(name)
        self._set.update(found)
        self._standing = True
        return {"pair": self._pair} | {name: _told(value) for name, value in found.items()}

    # --- points ---

    async def set_point(self, point: Point) -> None:
        """Set what differs from the last point, read it back and compare.

        What falls in magnitude is set before what rises, so that bias and level together never
        pass the larger of the two points. Raises InstrumentRefused if the meter does not take
        it; the meter then stands between the points, and the next one sets everything.
        """
        standing, self._standing = self._standing, False  # a reading after a refusal is none
        self._point = point
        for name, value in self._wanted(point):
            self._talker.settable(name, value)  # refuses before anything is sent
        self._standing = standing
        await self._persist(self._apply_point)
        if self._stated_timeout_s is None:
            driver = self._talker.driver
            self._timeout_s = (
                driver.link.timeout
                + driver.reading_time_s(self._integration, point.frequency_hz)
                + driver.settling_time_s(point.frequency_hz)
            )

    async def _apply_point(self) -> None:
        if self._point is None:
            return
        wanted = self._wanted(self._point)
        changes = {name: value for name, value in wanted if self._set.get(name) != value}
        if changes or not self._standing:
            self._standing = False
            await self._apply(self._level_out_of_the_way(changes) + self._in_order(changes))
            self._standing = True

    def _wanted(self, point: Point) -> list[tuple[str, Value]]:
        """Everything that the point needs, as settings in the order of safety."""
        if point.bias_v and point.bias_a:
            raise InstrumentRefused("a bias is a voltage or a current, not both; nothing was sent")
        wanted: list[tuple[str, Value]] = []
        biases = {"bias_voltage": point.bias_v, "bias_current": point.bias_a}
        for name, value in sorted(biases.items(), key=lambda one: abs(one[1])):
            output = _OUTPUT[name]
            if self._talker.can_set(name):
                wanted.append((name, value))
                if self._talker.can_set(output):
                    wanted.append((output, value != 0.0))
            elif value:
                raise InstrumentRefused(f"the meter has no {name.replace('_', ' ')} of its own")
        self._see_what_cannot_be_set(point)
        for name, value in (("level", point.level_v), ("frequency", point.frequency_hz)):
            if self._talker.can_set(name):
                wanted.append((name, value))
        return wanted

    def _see_what_cannot_be_set(self, point: Point) -> None:
        """Refuse a point that a person would have to turn the meter to, unless it tells us."""
        table = self._talker.driver.meter
        level_v = None if table is None else table.level
        if not self._talker.can_set("frequency") and "frequency_hz" not in self._reported:
            fixed = table.frequencies if table is not None else ()
            if len(fixed) != 1 or not isclose(point.frequency_hz, fixed[0], rel_tol=1e-3):
                raise InstrumentRefused(
                    f"the meter can neither be set to {point.frequency_hz:g} Hz nor asked for it"
                )
        held = level_v is not None and not self._talker.can_set("level")
        if held and not isclose(point.level_v, level_v or 0.0, rel_tol=0.01):
            raise InstrumentRefused(f"the meter's level is {level_v:g} V and cannot be set")

    def _as_asked(self, values: Mapping[str, Value]) -> bool:
        """Whether a meter that a person sets by hand is set to what was asked for."""
        frequency_hz = values.get("frequency_hz")
        asked_hz = self._point.frequency_hz if self._point is not None else frequency_hz
        if isinstance(frequency_hz, float) and not isclose(
            frequency_hz,
            asked_hz,  # type: ignore[arg-type]
            rel_tol=1e-3,
        ):
            return False
        pair = values.get("pair")
        if pair is None:
            return True
        self._pair = str(pair)
        return self._asked_pair is None or self._asked_pair == pair

    def _level_out_of_the_way(self, changes: dict[str, Value]) -> list[dict[str, Value]]:
        """The level to its least first, where what stands at the meter is not known.

        Whatever bias stands there then passes neither limit on its way: bias + √2·level falls,
        bias − √2·level rises.
        """
        least = self._least_level_v
        if least is None or "level" in self._set or not changes.keys() & _OUTPUT.keys():
            return []
        off = self.bias_is_off and self._confirmed_at == self._recoveries
        if off and not any(changes.get(name) for name in _OUTPUT):
            return []
        return [{"level": least}]

    @property
    def _least_level_v(self) -> float | None:
        level = self.limits.get("level")
        if level is None:
            return None
        return min(level.allowed, default=level.minimum)

    def _in_order(self, changes: dict[str, Value]) -> list[dict[str, Value]]:
        """The changes in two goes: the frequency and what falls, then what rises."""
        falling: dict[str, Value] = {}
        rising: dict[str, Value] = {}
        for name, value in changes.items():
            if name == "frequency" or value is False or self._falls(name, value):
                falling[name] = value
            else:
                rising[name] = value
        return [go for go in (falling, rising) if go]

    def _falls(self, name: str, value: Value) -> bool:
        now = self._set.get(name)
        if isinstance(value, str | tuple):
            return False
        if now is None or isinstance(now, str | tuple):
            return value == 0.0
        return abs(value) < abs(now)

    async def _apply(self, goes: list[dict[str, Value]]) -> None:
        for go in goes:
            touched = [name for name in go if name.startswith("bias")]
            for name in touched:
                self._bias[name] = None  # in flight: neither on nor off until it is read back
            for name in go:
                self._set.pop(name, None)
            await self._talker.set_all(go)
            self._bias.update({name: go[name] for name in touched})
            self._confirmed_at = self._recoveries
            self._set.update(go)

    async def rest(self) -> None:
        """Every bias to 0 and off, the level to its least, each read back.

        Each is tried, whatever became of those before, unless the link is beyond recovery. The
        first failure is raised at the end.
        """
        wanted: list[tuple[str, Value]] = []
        for name, output in _OUTPUT.items():
            wanted += [(name, 0.0), (output, False)]
        if self._least_level_v is not None:
            wanted.append(("level", self._least_level_v))
        self._point = None
        self._forget()
        failures: list[LinkError] = []
        for name, value in wanted:
            if self._talker.can_set(name) and not self._beyond_recovery:
                failures += await self._tried(name, value)
        self._beyond_recovery = False
        if failures:
            raise failures[0]

    async def _tried(self, name: str, value: Value) -> list[LinkError]:
        try:
            await self._persist(lambda: self._apply([{name: value}]), restore=False)
        except LinkError as error:
            return [error]
        return []

    # --- reading ---

    async def read(self) -> ImpedanceReading:
        """Take one reading. A bad one comes back with its status and NaN, never as a number.

        Raises LinkError only when the link is lost beyond its budget, or something else
        answers in the meter's place.
        """
        talker = self._talker
        link = talker.link
        if (
            link.dirty
            or talker.discards
            or not self._standing
            or link.recoveries != self._recoveries
        ):
            try:
                await self._persist(self._discard)
            except InstrumentRefused:
                return self._bad(Status.NOT_SET)
            except LinkError as error:
                if self._beyond_recovery or isinstance(error, WrongIdentity):
                    raise
                return self._bad(Status.TIMEOUT)
        reply = b""
        try:
            reply = await talker.exchange(self._query, timeout_s=self._timeout_s)
            values, resolutions, status = self._layout.decode(reply)
        except (LinkTimeout, LinkLost):
            return self._bad(Status.TIMEOUT)
        except ReplyMalformed as error:
            link.distrust(str(error))
            return self._bad(Status.MALFORMED, reply)
        except InstrumentRefused:
            return self._bad(Status.REFUSED, reply)
        if link.recoveries != self._recoveries:
            # it was recovered within the exchange: the meter may have been off in between
            return self._bad(Status.STALE, reply)
        if self._sees and not self._as_asked(values):
            return self._bad(Status.NOT_SET, reply)
        good = status is Status.OK
        get = values.get
        return ImpedanceReading(
            pair=self._pair,
            first=values["first"] if good else nan,  # type: ignore[arg-type]
            second=values["second"] if good else nan,  # type: ignore[arg-type]
            first_resolution=resolutions.get("first", 0.0),
            second_resolution=resolutions.get("second", 0.0),
            status=status,
            level_v=get("level_v", nan),  # type: ignore[arg-type]
            bias_v=get("bias_v", nan),  # type: ignore[arg-type]
            bias_a=get("bias_a", nan),  # type: ignore[arg-type]
            range=self._range_name(get("range", "")),
            reply=reply,
        )

    def _range_name(self, value: Value) -> str:
        name = self._ranges.get(value)
        if name is None:
            name = self._ranges[value] = f"{value:g}" if isinstance(value, float) else str(value)
        return name

    def _bad(self, status: Status, reply: bytes = b"") -> ImpedanceReading:
        return ImpedanceReading(pair=self._pair, first=nan, second=nan, status=status, reply=reply)

    async def _discard(self) -> None:
        """Throw away the readings that a setting asked to be thrown away."""
        while self._talker.discards:
            await self._talker.exchange(self._query, timeout_s=self._timeout_s)
            self._talker.discards -= 1

    # --- faults ---

    def _forget(self) -> None:
        """Nothing that was set counts any longer: the next point sets everything."""
        self._set.clear()
        self._standing = False

    async def _persist(self, work: Callable[[], Awaitable[T]], *, restore: bool = True) -> T:
        """Do some work over a link that may fault, restoring what was set after each fault.

        A refusal by the instrument is raised at once, and so is a link that is beyond recovery.
        """
        for last in (False,) * (TRIES - 1) + (True,):
            self._beyond_recovery = True
            await self._talker.link.recover()
            self._beyond_recovery = False
            try:
                await self._talker.fresh()
                if self._talker.link.recoveries != self._recoveries:
                    self._recoveries = self._talker.link.recoveries
                    self._forget()
                if restore and not self._standing:
                    await self._restore()
                return await work()
            except (WrongIdentity, InstrumentRefused):
                raise
            except LinkError:
                self._standing = False
                if last:
                    raise
        raise AssertionError("the last try returns or raises")

    async def _restore(self) -> None:
        """Set again, and read back, all that was asked for."""
        if self._preparation:
            await self._prepare()
            self._standing = False
        await self._apply_point()
        self._standing = True


def _told(value: Value) -> str:
    """A read-back as it is recorded."""
    if isinstance(value, bool):
        return "on" if value else "off"
    return f"{value:.9g}" if isinstance(value, float) else str(value)
