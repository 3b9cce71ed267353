"""One suite per role, passed by every shipped driver over every link that fits it."""

import pytest
from tests.contracts.roles.clauses import CLAUSES, Clause
from tests.contracts.roles.worlds import DRIVERS, FITTING, Place, World, driver_of, worlds

from ohmward.errors import WrongIdentity
from ohmward.setup.driver import Driver
from ohmward.terms.role import Role


@pytest.mark.parametrize("clause", CLAUSES, ids=lambda clause: clause.__name__)
@pytest.mark.parametrize("world", worlds(served=False), ids=str)
def test_in_process(world: World, clause: Clause) -> None:
    async def work(place: Place) -> None:
        await place.talker.identify()
        await clause(place)
        assert not place.talker.link.dirty
        assert place.talker.link.recoveries <= 1  # where a session was renewed on purpose

    world.run(work)


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize("world", worlds(served=True), ids=str)
def test_served(world: World) -> None:
    async def work(place: Place) -> None:
        await place.talker.identify()
        for clause in CLAUSES:
            await clause(place)

    world.run(work)


def test_no_driver_codec_or_role_is_left_out() -> None:
    drivers = [driver_of(name) for name in DRIVERS]
    assert {driver.codec for driver in drivers} == set(FITTING)
    assert {driver.role for driver in drivers} == set(Role)


def expecting(driver: Driver, model: str) -> Driver:
    table = driver.identity
    assert table is not None
    fields = (table.fields[0], model, *table.fields[2:])
    return driver.model_copy(update={"identity": table.model_copy(update={"fields": fields})})


@pytest.mark.parametrize(
    "world", [one for one in worlds(served=False) if one.driver.identity], ids=str
)
def test_nothing_more_is_sent_to_another_instrument(
    world: World, monkeypatch: pytest.MonkeyPatch
) -> None:
    other = expecting(world.driver, "SOMETHING-ELSE")
    monkeypatch.setattr(World, "driver", property(lambda self: other))
    assert other.identity is not None
    ask = other.identity.ask.encode("ascii")

    async def work(place: Place) -> None:
        with pytest.raises(WrongIdentity, match="SOMETHING-ELSE"):
            await place.talker.identify()
        with pytest.raises(WrongIdentity):
            await place.talker.link.recover()
        heard = [e.data.strip() for e in place.bench.records["it"].entries if e.what == "heard"]
        assert heard == [ask]

    world.run(work)
