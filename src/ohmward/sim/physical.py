"""Reads what is really there: part models, and a bench's physical file.

This is the simulator's own reader: it shares nothing with the one for the files that people
write, so that a mistake in one cannot hide in the other. Numbers are in SI units, the unit in
the key.
"""

import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any, TypeVar

from ohmward.sim.path import ContactAt, PathTruth, PlaceTruth, RelayKind, SupplyTruth
from ohmward.sim.standards import KINDS, StandardTruth


class PhysicalFileError(ValueError):
    """A physical file or part model that cannot be used; says which key."""


@dataclass(frozen=True, kw_only=True, slots=True)
class PartModel:
    """How parts of one make are, before one of them is drawn.

    Capacitors: ``loss`` is tan δ of the dielectric around each decade (frequency in Hz, tan δ);
    ``esr_ohm_f`` times 1/C is the resistance of plates and electrolyte at 20 °C (ohm·farad),
    ``esr_least_ohm`` its floor; ``tau_s`` is the insulation's time constant R·C;
    ``bias_half_v`` the DC voltage that halves C (0: none), relative to the rated voltage where
    ``bias_half_rated`` is given instead. Inductors: ``q_peak`` sets the core loss,
    ``saturation_rated`` is the bias current, over the rated one, at which L has lost 30 %;
    ``winding_ohm_h`` times L the winding's resistance (ohm per henry), ``winding_least_ohm``
    its floor; ``self_resonance_hz_h`` is f0·√L (Hz·√H), which gives the self-capacitance.
    All kinds: ``esl_h`` in series, ``stray_f`` across; ``temperature_per_k`` of the value.
    ``spread`` is the standard deviation of the value over the marked tolerance, and no part is
    further off than ``spread_most`` of the tolerance.

    Under voltage: ``leakage_per_k`` in the exponent of leakage; ``absorption`` is the share of
    the voltage that comes back after 15 min of charge, a short of 10 s and 15 min of rest,
    ``absorption_exponent`` that of charging current over time; ``breakdown_rated`` times the
    rated voltage breaks it down (0: never); ``heals`` says that a breakdown clears itself the
    first times. An oxide has ``ionic_s``: U_R·C over it is its current at the voltage up to
    which it is formed; ``forming_charge`` times C is the charge that forms one volt more.
    ``warm_k_w`` is how much warmer a watt makes the part in the end, ``warm_s`` how soon,
    ``vents_c`` the temperature at which it opens (0: never).
    """

    kind: str
    spread: float = 0.25
    spread_most: float = 0.6
    temperature_per_k: float = 0.0
    loss: tuple[tuple[float, float], ...] = ()
    esr_ohm_f: float = 0.0
    esr_least_ohm: float = 0.0
    esr_per_k: float = 0.0
    esr_spread: float = 0.1
    esl_h: float = 0.0
    tau_s: float = 0.0
    bias_half_v: float = 0.0
    bias_half_rated: float = 0.0
    stray_f: float = 0.0
    q_peak: float = 0.0
    saturation_rated: float = 0.0
    winding_ohm_h: float = 0.0
    winding_least_ohm: float = 0.0
    self_resonance_hz_h: float = 0.0
    leakage_per_k: float = math.log(10) / 60  # τ at 25 °C over τ at 85 °C, makers' tables
    absorption: float = 0.0
    absorption_exponent: float = 1.0
    breakdown_rated: float = 0.0
    heals: bool = False
    ionic_s: float = 0.0
    forming_charge: float = 0.0
    warm_k_w: float = 0.0
    warm_s: float = 60.0
    vents_c: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class PartTruth:
    """What one part of the lot really is: its model, its fault and what overrides the draw.

    ``clears`` are weak spots that clear themselves, each at a voltage over the rated one.
    """

    model: str
    fault: str = ""
    severity: float = 1.0
    clears: tuple[float, ...] = ()


@dataclass(frozen=True, kw_only=True, slots=True)
class FixtureTruth:
    """The leads and clips of one position: in series R and L, across it C and G."""

    series_ohm: float = 0.0
    series_h: float = 0.0
    stray_f: float = 0.0
    stray_s: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class RoomTruth:
    """The air around the bench: mean, and a slow swing with the day."""

    temperature_c: float = 23.0
    swing_k: float = 0.5
    humidity_pct: float = 45.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Physical:
    """A physical file: parts by id, fixture, room, figures of instruments, path, standards."""

    parts: Mapping[str, PartTruth] = field(default_factory=dict)
    fixture: FixtureTruth = FixtureTruth()
    room: RoomTruth = RoomTruth()
    instruments: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    path: PathTruth | None = None
    standards: Mapping[str, StandardTruth] = field(default_factory=dict)


T = TypeVar("T")


def read_model(path: Path) -> PartModel:
    """A part model from simulators/parts. Raises PhysicalFileError."""
    data = _read(path)
    if "loss" in data:
        data["loss"] = tuple((float(f), float(d)) for f, d in data["loss"])
    return _make(PartModel, data, str(path))


def read_physical(path: Path) -> Physical:
    """A physical file. Raises PhysicalFileError naming the key."""
    data = _read(path)
    known = {"part", "fixture", "room", "instrument", "high_voltage", "standard"}
    unknown = set(data) - known
    if unknown:
        raise PhysicalFileError(f"{path}: unknown {', '.join(sorted(unknown))}")
    parts = data.get("part", {})
    standards = data.get("standard", {})
    strange = set(standards) - set(KINDS)
    if strange:
        raise PhysicalFileError(f"{path}: unknown standard {', '.join(sorted(strange))}")
    high = data.get("high_voltage")
    return Physical(
        parts={name: _part(one, f"{path}: part.{name}") for name, one in parts.items()},
        path=None if high is None else _path(high, f"{path}: high_voltage"),
        fixture=_make(FixtureTruth, data.get("fixture", {}), f"{path}: fixture"),
        room=_make(RoomTruth, data.get("room", {}), f"{path}: room"),
        instruments=data.get("instrument", {}),
        standards={
            name: _make(StandardTruth, one, f"{path}: standard.{name}")
            for name, one in standards.items()
        },
    )


def _part(data: Mapping[str, Any], where: str) -> PartTruth:
    return _make(PartTruth, {**data, "clears": tuple(data.get("clears", ()))}, where)


def _path(data: Mapping[str, Any], where: str) -> PathTruth:
    """The wiring of high voltage; contacts are tables with a channel."""
    plain = dict(data)
    kinds = plain.pop("relay", {})
    relays = {name: _make(RelayKind, one, f"{where}.relay.{name}") for name, one in kinds.items()}

    def contact(one: Mapping[str, Any], key: str) -> ContactAt:
        made = _make(ContactAt, one, f"{where}.{key}")
        if made.relay and made.relay not in relays:
            raise PhysicalFileError(f"{where}.{key}: there is no relay {made.relay!r}")
        return made

    def place(one: Mapping[str, Any], key: str) -> PlaceTruth:
        row = dict(one)
        for name in ("connect", "discharge", "short"):
            if name in row:
                row[name] = contact(row[name], f"{key}.{name}")
        for name in ("sense", "meter"):
            row[name] = tuple(contact(each, f"{key}.{name}") for each in row.get(name, ()))
        row["broken"] = frozenset(row.get("broken", ()))
        return _make(PlaceTruth, row, f"{where}.{key}")

    for name in ("supply", "bypass"):
        if name in plain:
            plain[name] = contact(plain[name], name)
    plain["source"] = _make(SupplyTruth, plain.get("source", {}), f"{where}.source")
    places = enumerate(plain.pop("position", ()), start=1)
    plain["places"] = tuple(place(one, f"position[{number}]") for number, one in places)
    return _make(PathTruth, {**plain, "relays": relays}, where)


def _read(path: Path) -> dict[str, Any]:
    try:
        data = tomllib.loads(path.read_text("utf-8"))
    except (OSError, ValueError) as error:
        raise PhysicalFileError(f"{path}: {error}") from error
    if data.pop("format", None) != 1:
        raise PhysicalFileError(f"{path}: expected format = 1")
    return data


def _make(model: type[T], data: Mapping[str, Any], where: str) -> T:
    known = {one.name for one in fields(model)}  # type: ignore[arg-type]  # T is a dataclass
    unknown = set(data) - known
    if unknown:
        raise PhysicalFileError(f"{where}: unknown {', '.join(sorted(unknown))}")
    try:
        return model(**data)
    except TypeError as error:
        raise PhysicalFileError(f"{where}: {error}") from error
