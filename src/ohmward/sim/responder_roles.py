"""What stands behind a responder, by role: the simulated part, the relays, the room, or nothing."""

import math
from collections.abc import Mapping
from typing import Any, Protocol

from ohmward.sim.meter_pairs import NOT_A_NUMBER, OVERFLOW, PAIRS
from ohmward.sim.terminals import Relays, Room, Terminals

_PAIRS = {
    "R-X": "RX",
    "Z-theta": "ZTR",
    "G-B": "GB",
    "Cs-D": "CSD",
    "Cp-D": "CPD",
    "Cs-Rs": "CSRS",
    "Cp-Rp": "CPRP",
    "Cp-G": "CPG",
    "Ls-D": "LSD",
    "Ls-Q": "LSQ",
    "Ls-Rs": "LSRS",
    "Lp-D": "LPD",
    "Lp-Q": "LPQ",
    "Lp-Rp": "LPRP",
    "Lp-G": "LPG",
}


class Behaviour(Protocol):
    """What a responder's messages do, and what its readings hold."""

    def changed(self, setting: str, now_s: float) -> None:
        """A setting has been set."""

    def act(self, action: str, channels: tuple[str, ...], now_s: float) -> float:
        """An action has been asked for; returns when it is done."""

    def read(
        self, reading: str, settings: Mapping[str, Any], channels: tuple[str, ...], now_s: float
    ) -> dict[str, Any]:
        """The values of a reading by field name; a status by its meaning."""


class Passive:
    """Takes settings and actions without any effect, and has its settings for readings."""

    def changed(self, setting: str, now_s: float) -> None:
        """Nothing follows."""

    def act(self, action: str, channels: tuple[str, ...], now_s: float) -> float:
        """Nothing follows."""
        return now_s

    def read(
        self, reading: str, settings: Mapping[str, Any], channels: tuple[str, ...], now_s: float
    ) -> dict[str, Any]:
        """What was set, under the reading's own name; any other number is 0."""
        on = settings.get("output", "on") == "on"
        value = settings.get(reading, 0.0) if on else 0.0
        return {"": 0.0, **settings, reading: value, "interlock": True, "status": "ok"}


class PerfectMeter(Passive):
    """An impedance meter without errors, behind a source resistance as its driver states it."""

    def __init__(self, terminals: Terminals, source_ohm: float = 100.0, pair: str = "") -> None:
        self._terminals = terminals
        self._source_ohm = source_ohm
        self._pair = pair

    def read(
        self, reading: str, settings: Mapping[str, Any], channels: tuple[str, ...], now_s: float
    ) -> dict[str, Any]:
        """The pair that is set, of what is connected."""
        frequency_hz = settings.get("frequency") or 1000.0
        level_v = settings.get("level") or 1.0
        bias_v = settings.get("bias_voltage", 0.0)
        if settings.get("bias_voltage_output", "on") == "off":
            bias_v = 0.0
        bias_a = settings.get("bias_current", 0.0)
        if settings.get("bias_current_output", "on") == "off":
            bias_a = 0.0
        z = self._terminals.connection(now_s).impedance(frequency_hz, level_v, bias_v, bias_a)
        values: dict[str, Any] = {"bias_v": bias_v, "bias_a": bias_a}
        values["range"] = settings.get("range", NOT_A_NUMBER)
        if self._terminals.changed_s(now_s) > now_s or not abs(z) < 1e12:
            status = "overload"
            values |= {"first": OVERFLOW, "second": OVERFLOW, "level_v": level_v}
        else:
            status = "ok"
            pair = _PAIRS.get(settings.get("pair", "") or self._pair, "RX")
            first, second = PAIRS[pair](z, 2.0 * math.pi * frequency_hz)
            share = abs(z) / abs(z + self._source_ohm)
            values |= {"first": first, "second": second, "level_v": level_v * share}
        values["status"] = status
        return values


class PerfectScanner(Passive):
    """Moves the bench's contacts, and hears nothing more until they have come to rest."""

    def __init__(self, contacts: Relays) -> None:
        self._contacts = contacts

    def act(self, action: str, channels: tuple[str, ...], now_s: float) -> float:
        """Close, open, open all."""
        known = [each for each in channels if each in self._contacts.channels]
        if action in ("close", "open"):
            return self._contacts.order(known, action == "close", now_s)
        if action in ("open_all", "reset"):
            return self._contacts.order(self._contacts.channels, False, now_s)
        return now_s

    def read(
        self, reading: str, settings: Mapping[str, Any], channels: tuple[str, ...], now_s: float
    ) -> dict[str, Any]:
        """What the contacts are."""
        closed = self._contacts.reported(now_s)
        return {
            "channels": tuple(sorted(closed)),
            "closed": tuple(each in closed for each in channels),
            "status": "ok",
        }


class PerfectThermometer(Passive):
    """Reads the room."""

    def __init__(self, room: Room) -> None:
        self._room = room

    def read(
        self, reading: str, settings: Mapping[str, Any], channels: tuple[str, ...], now_s: float
    ) -> dict[str, Any]:
        """Temperature and humidity."""
        return {
            "temperature": self._room.temperature_c(now_s),
            "humidity": self._room.humidity_pct(now_s),
            "status": "ok",
        }
