"""What the meter's leads reach, against circuit theory."""

import cmath
import math
from types import SimpleNamespace

import pytest

from ohmward.sim.fixture_terminals import FixtureTerminals
from ohmward.sim.scanner import RELAY_S, Contacts

CLIPS = SimpleNamespace(series_ohm=0.05, series_h=100e-9, stray_f=2e-12, stray_s=1e-10)
AIR = SimpleNamespace(temperature_c=lambda now_s: 20.0 + now_s)
F = 100e3
W = 2 * math.pi * F


class Capacitor:
    def __init__(self, farad: float) -> None:
        self.farad = farad
        self.temperatures: list[float] = []

    def impedance(
        self,
        frequency_hz: float,
        bias_v: float,
        level_v: float,
        temperature_c: float,
        bias_a: float = 0.0,
    ) -> complex:
        self.temperatures.append(temperature_c)
        return 1 / (2j * math.pi * frequency_hz * self.farad)

    def resistance_dc_ohm(self) -> float:
        return 1e12


def tray() -> tuple[FixtureTerminals, Contacts]:
    contacts = Contacts(("101", "102", "201", "202"))
    found = FixtureTerminals(contacts, {"1": ("101", "201"), "2": ("102", "202")}, CLIPS, AIR)
    found.load("1", {"C1": Capacitor(1e-9)})
    found.load("2", {"C2": Capacitor(3e-9)})
    return found, contacts


def in_clips(farad: float) -> complex:
    return 0.05 + 1j * W * 100e-9 + 1 / (1e-10 + 1j * W * (farad + 2e-12))


def seen(found: FixtureTerminals, now_s: float) -> complex:
    return found.connection(now_s).impedance(F, 1.0, 0.0, 0.0)


def close(contacts: Contacts, *channels: str, now_s: float) -> None:
    contacts.order(channels, True, now_s)


def test_nothing_connected_is_an_open_fixture() -> None:
    found, contacts = tray()
    assert seen(found, 0.0) == pytest.approx(in_clips(0.0))
    close(contacts, "101", "202", now_s=1.0)
    assert seen(found, 2.0) == pytest.approx(in_clips(0.0)), "one side of each position is no path"
    assert found.connection(2.0).key == ""


def test_a_position_is_its_part_in_its_clips() -> None:
    found, contacts = tray()
    close(contacts, "101", "201", now_s=1.0)
    assert found.connection(1.0).key == "", "the relays have not closed yet"
    assert found.connection(1.0 + RELAY_S).key == "C1"
    assert seen(found, 2.0) == pytest.approx(in_clips(1e-9))
    assert found.changed_s(2.0) == pytest.approx(1.0 + RELAY_S)


def test_two_positions_are_in_parallel() -> None:
    found, contacts = tray()
    close(contacts, "101", "201", "102", "202", now_s=1.0)
    one, other = in_clips(1e-9), in_clips(3e-9)
    assert seen(found, 2.0) == pytest.approx(one * other / (one + other))
    assert found.connection(2.0).key == "C1+C2"


def test_short_and_open_are_those_of_the_clips() -> None:
    connection = tray()[0].connection(0.0)
    assert connection.short_impedance(F) == pytest.approx(0.05 + 1j * W * 100e-9)
    assert connection.open_impedance(F) == pytest.approx(in_clips(0.0))
    bare = FixtureTerminals(
        Contacts(()),
        {"1": ()},
        SimpleNamespace(series_ohm=0.0, series_h=0.0, stray_f=0.0, stray_s=0.0),
        AIR,
    )
    assert not cmath.isfinite(bare.connection(0.0).impedance(F, 1.0, 0.0, 0.0))


def test_direct_current_goes_through_part_and_stray_conductance() -> None:
    found, contacts = tray()
    close(contacts, "101", "201", now_s=1.0)
    expected = 0.05 + 1 / (1e-10 + 1e-12)
    assert found.connection(2.0).resistance_dc_ohm() == pytest.approx(expected)


def test_a_part_has_the_temperature_of_the_room_and_can_be_changed_by_hand() -> None:
    part = Capacitor(2e-9)
    found = FixtureTerminals(Contacts(()), {"clips": ()}, CLIPS, AIR)
    found.load("clips", {"C9": part}, now_s=5.0)
    assert seen(found, 7.0) == pytest.approx(in_clips(2e-9))
    assert part.temperatures == [27.0]
    assert found.changed_s(7.0) == 5.0
    found.load("clips", {}, now_s=8.0)
    assert found.connection(8.0).key == ""
    with pytest.raises(KeyError):
        found.load("nowhere", {})
