"""The low-voltage warden against relays that stick, weld and lose their link."""

import pytest
import trio
import trio.testing

from ohmward.errors import InstrumentRefused, LinkError, LinkLost, NotProvenSafe, SafetyTrip
from ohmward.safety.handle import Ending
from ohmward.safety.inprocess import HandLoadedWarden, ScannerWarden

CHANNELS = {"1": ("101", "201"), "2": ("102", "202")}


class Relays:
    """Relays as they are on a bench: some will not close, some will not open, links break."""

    def __init__(self, *, awake: tuple[str, ...] = ()) -> None:
        self.really_closed = set(awake)
        self.stuck_open: set[str] = set()
        self.welded: set[str] = set()
        self.link_fails_on: list[str] = []
        self.ever_closed_together: list[frozenset[str]] = []

    def _link(self, verb: str) -> None:
        if verb in self.link_fails_on:
            self.link_fails_on.remove(verb)
            raise LinkLost(f"no answer to {verb}")

    async def close(self, channels: tuple[str, ...]) -> None:
        await trio.sleep(0.005)
        self._link("close")
        self.really_closed |= set(channels) - self.stuck_open
        self.ever_closed_together.append(frozenset(self.really_closed))

    async def open(self, channels: tuple[str, ...]) -> None:
        await trio.sleep(0.005)
        self._link("open")
        self.really_closed -= set(channels) - self.welded

    async def open_all(self) -> None:
        await trio.sleep(0.005)
        self._link("open_all")
        self.really_closed &= self.welded

    async def closed(self) -> frozenset[str]:
        await trio.sleep(0.001)
        self._link("closed")
        return frozenset(self.really_closed)


def virtual(main):
    trio.run(main, clock=trio.testing.MockClock(autojump_threshold=0))


def warden_of(relays: Relays) -> ScannerWarden:
    return ScannerWarden(scanner=relays, meter_channels=CHANNELS)


def test_a_lease_closes_exactly_its_contacts_and_a_release_opens_them():
    relays = Relays(awake=("101", "999"))

    async def main() -> None:
        warden = warden_of(relays)
        await warden.start()
        assert relays.really_closed == set()
        for position in ("1", "2", "1"):
            await warden.lease(position)
            assert relays.really_closed == set(CHANNELS[position])
            assert warden.leased == position
            await warden.release()
            assert relays.really_closed == set()
            assert warden.leased is None
        assert await warden.stop() == Ending(proven=True)

    virtual(main)
    assert all(len(together) <= 2 for together in relays.ever_closed_together)


def test_a_second_lease_trips_and_opens_the_first():
    async def main() -> None:
        relays = Relays()
        warden = warden_of(relays)
        await warden.start()
        await warden.lease("1")
        with pytest.raises(SafetyTrip, match="while 1 has one"):
            await warden.lease("2")
        assert relays.really_closed == set()

    virtual(main)


@pytest.mark.parametrize("position", ["3", ""])
def test_an_unknown_position_trips(position):
    async def main() -> None:
        warden = warden_of(Relays())
        await warden.start()
        with pytest.raises(SafetyTrip, match="which this bench has not"):
            await warden.lease(position)

    virtual(main)


def test_a_contact_that_does_not_close_trips():
    async def main() -> None:
        relays = Relays()
        relays.stuck_open.add("201")
        warden = warden_of(relays)
        await warden.start()
        with pytest.raises(SafetyTrip, match="101 read back closed"):
            await warden.lease("1")
        assert relays.really_closed == set()
        assert (await warden.stop()).proven

    virtual(main)


def test_a_scanner_that_says_by_itself_that_it_did_not_obey_trips():
    class Refusing(Relays):
        async def close(self, channels: tuple[str, ...]) -> None:
            await super().close(channels)
            raise InstrumentRefused("relay 201 is not closed")

    async def main() -> None:
        relays = Refusing()
        warden = warden_of(relays)
        await warden.start()
        with pytest.raises(SafetyTrip, match="did not close as told"):
            await warden.lease("1")
        assert relays.really_closed == set()

    virtual(main)


def test_a_foreign_contact_that_is_closed_trips_before_the_meter_is_connected():
    async def main() -> None:
        relays = Relays()
        warden = warden_of(relays)
        await warden.start()
        relays.really_closed.add("102")
        with pytest.raises(SafetyTrip, match="102 read back closed"):
            await warden.lease("1")
        assert relays.really_closed == set()
        assert relays.ever_closed_together == []

    virtual(main)


def test_a_welded_contact_is_not_proven_safe_whenever_it_is_found():
    async def main() -> None:
        relays = Relays()
        warden = warden_of(relays)
        await warden.start()
        await warden.lease("2")
        relays.welded.add("102")
        with pytest.raises(NotProvenSafe, match="102 will not open"):
            await warden.release()
        ending = await warden.stop()
        assert not ending.proven
        assert "by hand" in ending.reasons[0]
        with pytest.raises(NotProvenSafe):
            await warden_of(relays).start()

    virtual(main)


@pytest.mark.parametrize("verb", ["close", "closed", "open"])
def test_a_lost_link_opens_everything_before_it_is_reported(verb):
    async def main() -> None:
        relays = Relays()
        warden = warden_of(relays)
        await warden.start()
        relays.link_fails_on.append(verb)
        with pytest.raises(LinkError):  # noqa: PT012 - either call may be the one that fails
            await warden.lease("1")
            await warden.release()
        assert relays.really_closed == set()
        assert warden.leased is None
        await warden.lease("1")  # and the next lease is a clean one
        await warden.release()

    virtual(main)


def test_a_link_that_stays_lost_is_not_proven_safe():
    async def main() -> None:
        relays = Relays()
        warden = warden_of(relays)
        await warden.start()
        await warden.lease("1")
        relays.link_fails_on += ["open", *4 * ["open_all"]]
        with pytest.raises(NotProvenSafe):
            await warden.release()
        assert not (await warden.stop()).proven
        assert (await warden.stop()).proven  # the link came back: now it is

    virtual(main)


def test_stop_is_not_cancelled():
    async def main() -> None:
        relays = Relays()
        warden = warden_of(relays)
        await warden.start()
        with trio.move_on_after(0.001):
            await warden.lease("1")
        with trio.CancelScope() as scope:
            scope.cancel()
            ending = await warden.stop()
        assert ending.proven
        assert relays.really_closed == set()

    virtual(main)


def test_a_person_is_asked_for_each_part_once():
    asked: list[tuple[str, str]] = []

    class Person:
        async def place(self, part_id: str, position: str) -> None:
            await trio.sleep(20)
            asked.append((part_id, position))

    async def main() -> None:
        warden = HandLoadedWarden(operator=Person(), positions=frozenset({"tray"}))
        await warden.start()
        for part in ("C1", "C1", "C2"):
            await warden.lease("tray", part)
            await warden.release()
        with pytest.raises(SafetyTrip, match="which part"):
            await warden.lease("tray")
        with pytest.raises(SafetyTrip, match="never given"):
            await warden.release()
        assert (await warden.stop()).proven

    virtual(main)
    assert asked == [("C1", "tray"), ("C2", "tray")]


def test_an_ending_that_is_not_proven_says_why():
    with pytest.raises(ValueError, match="says why"):
        Ending(proven=False)
    together = Ending.of_all((Ending(proven=True), Ending(proven=False, reasons=("C1 is live",))))
    assert together == Ending(proven=False, reasons=("C1 is live",))
    assert Ending.of_all(()).proven
