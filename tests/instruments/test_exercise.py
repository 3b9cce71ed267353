"""A driver tried on its instrument, entry by entry, with nothing energised on the way."""

from contextlib import aclosing

import pytest
from tests.contracts.roles.worlds import DRIVERS, Place, World, driver_of

from ohmward.instruments.exercise import AT_REST, Exercised, exercise
from ohmward.instruments.transcript import TappedWire, Transcript
from ohmward.sim.faults import Fault
from ohmward.terms.role import Role

SUPPLIES = [name for name in DRIVERS if driver_of(name).supply is not None]


def tried(world: World, *faults: Fault) -> list[Exercised]:
    async def work(place: Place) -> list[Exercised]:
        transcript = Transcript()
        place.talker.link = TappedWire(place.talker.link, transcript)
        place.layer.inject(*faults)
        async with aclosing(exercise(place.talker, transcript)) as entries:
            found = [one async for one in entries]
        if place.talker.driver.supply is not None:
            assert (place.device.core.level_v, place.device.core.on) == (0.0, False)
            heard = b"".join(e.data for e in place.bench.records["it"].entries if e.what == "heard")
            assert b"OUTP 1" not in heard
            assert b"OUTP ON" not in heard
            assert b"N1" not in heard
        return found

    return world.run(work)


def in_process(name: str) -> World:
    codec = driver_of(name).codec
    return World(name, "socket" if codec == "scpi" else "serial", served=False)


@pytest.mark.parametrize("name", DRIVERS)
def test_every_shipped_driver_does_well_on_its_instrument(name: str) -> None:
    driver = driver_of(name)
    found = {one.entry: one for one in tried(in_process(name))}
    assert [one for one in found.values() if one.failed] == []
    assert set(found) >= {f"setting.{one}" for one in driver.setting}
    assert "identity" in found
    asked = [f"reading.{n}" for n, one in driver.reading.items() if "{" not in one.ask]
    for entry in asked:
        assert found[entry].value
        assert found[entry].took_s >= 0.0
    if driver.role is Role.SCANNER:
        assert found["action.close"].verdict == "not tried: actions are left alone"


@pytest.mark.parametrize("name", SUPPLIES)
def test_what_could_energise_is_only_set_to_nothing(name: str) -> None:
    found = {one.entry: one for one in tried(in_process(name))}
    assert found["setting.voltage"].value == "0"
    assert found["setting.output"].value == "off"
    assert AT_REST["voltage"] == 0.0


def test_a_reply_that_does_not_fit_is_told_with_its_bytes() -> None:
    garbled = Fault(kind="truncated", matching=b"VOLT:RANG?")
    found = {one.entry: one for one in tried(in_process("scpi-multimeter"), garbled)}
    assert found["setting.range"].failed
    assert any(one.sent == b"VOLT:RANG?" for one in found["setting.range"].exchanges)
    assert not found["setting.integration"].failed  # and it goes on


def test_another_instrument_ends_it_at_once() -> None:
    odd = Fault(kind="identity")
    entries = tried(in_process("scpi-multimeter"), odd)  # another serial number is not another kind
    assert len(entries) > 5
    garbage = Fault(kind="garbage", matching=b"*IDN?")
    (only,) = tried(in_process("scpi-multimeter"), garbage)
    assert only.ends
    assert "expected" in only.verdict


def test_a_lost_instrument_ends_it() -> None:
    gone = Fault(kind="disconnect", matching=b"APER?", delay_s=1e6)
    entries = tried(in_process("scpi-multimeter"), gone)
    assert entries[-1].entry == "setting.integration"
    assert entries[-1].ends
