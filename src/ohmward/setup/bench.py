"""The bench file: which instrument is at which address, and how the meter reaches each part."""

from collections.abc import Iterator
from datetime import date
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BeforeValidator, Field, PrivateAttr

from ohmward.errors import Problems
from ohmward.setup.address import Address, AddressError, read_address
from ohmward.setup.files import is_file
from ohmward.setup.high_voltage import HighVoltage
from ohmward.setup.high_voltage_check import findings, missing
from ohmward.setup.names import INSTRUMENT_NAME, Channel, Name
from ohmward.setup.quantities import Metres, Model, PositiveAmperes, PositiveVolts, wrong
from ohmward.setup.toml import one_of, read_toml, salvage, validate
from ohmward.terms.role import Role


def _check_address(value: object) -> object:
    if isinstance(value, str):
        try:
            return read_address(value).text
        except AddressError as error:
            raise wrong(error.expected, f"'{value}'", "wrong-address") from None
    return value


class BenchInstrument(Model):
    """One instrument: what it is for, how it talks and where it is."""

    role: Role = Field(description="what the instrument is for")
    driver: str = Field(
        min_length=1, description="name of a shipped driver, or path of a driver file"
    )
    address: Annotated[str, BeforeValidator(_check_address)] = Field(
        description="VISA address", examples=["TCPIP::192.0.2.10::5025::SOCKET"]
    )
    shares_link: bool = Field(False, description="another instrument is at the same address")
    serial_number: str = Field("", description="refuse an instrument with any other")
    calibration_due: date | None = Field(None, description="the day its calibration ends")
    cable_m: Metres = Field(0.0, alias="cable", description="length of the test cable")

    @property
    def link(self) -> Address:
        """Its address, taken apart."""
        return read_address(self.address)


class Fixture(Model):
    """What holds the parts, and how they get to the meter."""

    loading: Literal["scanner", "by hand"] = Field(
        description="a scanner connects one position after another, or a person loads each part"
    )
    name: str = Field("", description="what the fixture is called, for its compensation")
    standards: str = Field(
        "", description="file that says what its open, short and load are, for its compensation"
    )


class Position(Model):
    """One place for a part."""

    name: Name = Field(description="as the parts list names it")
    meter_channels: tuple[Channel, ...] = Field(
        (), description="scanner contacts that connect the impedance meter when all are closed"
    )


class Simulation(Model):
    """What stands behind the bench in a dry run or when it is served."""

    physical_file: str = Field(
        min_length=1, description="what is really wired, and what the parts really are"
    )


class Bench(Model):
    """A bench as its file describes it."""

    format: Literal[1] = Field(description="version of this file's form")
    name: Name = Field(description="what the bench is called in reports")
    instruments: dict[str, BenchInstrument] = Field(
        alias="instrument", min_length=1, description="the instruments by name"
    )
    fixture: Fixture
    positions: tuple[Position, ...] = Field(
        alias="position", min_length=1, description="the places for parts"
    )
    bias_ceiling_v: PositiveVolts | None = Field(
        None, alias="bias_ceiling", description="no part sees more DC voltage from the meter"
    )
    bias_current_ceiling_a: PositiveAmperes | None = Field(
        None, alias="bias_current_ceiling", description="no part sees more DC current"
    )
    level_ceiling_v: PositiveVolts | None = Field(
        None, alias="level_ceiling", description="no part sees a higher AC level (rms)"
    )
    high_voltage: HighVoltage | None = Field(
        None, description="how high voltage reaches the parts and how they are freed of it"
    )
    simulation: Simulation | None = None

    _path: Path = PrivateAttr(default_factory=Path)

    @property
    def path(self) -> Path:
        """The file that the bench was read from."""
        return self._path

    @property
    def physical_path(self) -> Path | None:
        """The physical file, found beside the bench file; None where the bench names none."""
        if self.simulation is None:
            return None
        return self._path.parent / self.simulation.physical_file

    @property
    def standards_path(self) -> Path | None:
        """The standards file, found beside the bench file; None where the bench names none."""
        return self._path.parent / self.fixture.standards if self.fixture.standards else None

    def of_role(self, role: Role) -> BenchInstrument | None:
        """The instrument of a role, or None."""
        return next((one for one in self.instruments.values() if one.role is role), None)

    def name_of_role(self, role: Role) -> str:
        """The name of the instrument of a role, or ''."""
        return next((name for name, one in self.instruments.items() if one.role is role), "")

    def position(self, name: str) -> Position | None:
        """The position of that name, or None."""
        return next((place for place in self.positions if place.name == name), None)


def load_bench(path: Path, problems: Problems) -> Bench | None:
    """Read a bench file: the bench, or None with every problem noted."""
    before = len(problems)
    data = read_toml(path, problems)
    if data is None:
        return None
    bench = validate(Bench, data, path, problems)
    whole = bench is not None
    checked = bench or salvage(Bench, data, _STAND_INS)
    if checked is not None:
        checked._path = path
        for kind, key, expected, found in _across(checked, data, whole=whole):
            problems.add(id=kind, file=path, key=key, expected=expected, found=found)
    return bench if len(problems) == before else None


# What stands for a key that is missing or wrong while the others are checked against each other.
_STAND_INS = {"format": 1, "name": "-", "fixture": {"loading": "by hand"}}

_Finding = tuple[str, str, str, str]


def _across(bench: Bench, data: dict[str, Any], *, whole: bool) -> Iterator[_Finding]:
    """What is wrong between keys; with ``whole`` also what is missing as a whole."""
    yield from _instrument_findings(bench)
    yield from _position_findings(bench)
    if whole:
        yield from _scanner_findings(bench)
        physical = bench.physical_path
        if physical is not None and not is_file(physical):
            yield "file-missing", "simulation.physical_file", "a file", f"none at {physical}"

    if bench.high_voltage is not None:
        contacts = {place.name: place.meter_channels for place in bench.positions}
        yield from findings(bench.high_voltage, meter_channels=contacts)
        if whole:
            roles = {one.role for one in bench.instruments.values()}
            yield from missing(bench.high_voltage, roles)


def _instrument_findings(bench: Bench) -> Iterator[_Finding]:
    roles: dict[Role, str] = {}
    links: dict[str, str] = {}
    for name, one in bench.instruments.items():
        if INSTRUMENT_NAME.fullmatch(name) is None:
            yield "wrong-name", f"instrument.{name}", "letters, digits, '-' and '_'", f"'{name}'"
        other = roles.setdefault(one.role, name)
        if other != name:
            yield (
                "role-taken",
                f"instrument.{name}.role",
                f"one {one.role.value} on the bench",
                f"'{other}' has this role too",
            )
        neighbour = links.setdefault(one.link.link, name)
        shared = one.shares_link and bench.instruments[neighbour].shares_link
        if neighbour != name and not shared:
            yield (
                "address-taken",
                f"instrument.{name}.address",
                "an address of its own, or shares_link = true for both",
                f"the address of '{neighbour}'",
            )


def _position_findings(bench: Bench) -> Iterator[_Finding]:
    names: dict[str, int] = {}
    contacts: dict[frozenset[str], str] = {}
    for index, place in enumerate(bench.positions):
        key = f"position[{index + 1}]"
        first = names.setdefault(place.name.casefold(), index)
        if first != index:
            yield (
                "duplicate-position",
                f"{key}.name",
                "a name of its own",
                f"'{place.name}', which is position[{first + 1}] too",
            )
        channels = frozenset(place.meter_channels)
        if len(channels) != len(place.meter_channels):
            yield "duplicate-channel", f"{key}.meter_channels", "each channel once", "one twice"
        for others, name in contacts.items():
            if channels and (channels <= others or others <= channels):
                yield (
                    "position-not-apart",
                    f"{key}.meter_channels",
                    f"contacts that leave '{name}' open",
                    ", ".join(place.meter_channels),
                )
        if channels:
            contacts[channels] = place.name


def _scanner_findings(bench: Bench) -> Iterator[_Finding]:
    by_scanner = bench.fixture.loading == "scanner"
    if by_scanner and bench.of_role(Role.SCANNER) is None:
        yield (
            "scanner-missing",
            "fixture.loading",
            "an instrument with the role 'scanner'",
            "none",
        )
    for index, place in enumerate(bench.positions):
        key = f"position[{index + 1}].meter_channels"
        if by_scanner and not place.meter_channels:
            yield "channels-missing", key, "the contacts that connect the meter", "none"
        if not by_scanner and place.meter_channels:
            yield (
                "channels-without-scanner",
                key,
                "none where parts are loaded by hand",
                ", ".join(place.meter_channels),
            )


def unknown_position(bench: Bench, name: str) -> str:
    """What to expect instead of a position that the bench does not have."""
    return one_of(name, [place.name for place in bench.positions])
