"""The supply with an inductor behind it: its current goes to zero before anything opens."""

from math import exp

import pytest
import trio
from tests.safety.rc_bench import Bench, Part, SupplyOf, facts, permit
from tests.safety.test_high_voltage import virtual

from ohmward.safety.ledger import Ledger
from ohmward.safety.rules import SourceEvent, SourceState
from ohmward.safety.source import Source
from ohmward.safety.switchboard import Switchboard
from ohmward.terms.kind import Kind
from ohmward.terms.reading import SupplyReading

HENRY_PER_OHM = 0.2  # L/R: the current falls as e^(−t·R/L)


class IntoInductor(SupplyOf):
    """A supply whose current goes on after 0 V is set; it notes what it was told, and when."""

    def __init__(self, bench: Bench, *, persists: bool = False) -> None:
        super().__init__(bench)
        self.persists = persists
        self.zero_since_s: float | None = None
        self.told: list[tuple[str, float]] = []

    def amperes(self) -> float:
        if self.zero_since_s is None or self.persists:
            return 2.0
        return 2.0 * exp(-(trio.current_time() - self.zero_since_s) / HENRY_PER_OHM)

    async def set_voltage(self, voltage_v: float) -> None:
        await super().set_voltage(voltage_v)
        if voltage_v == 0.0 and self.zero_since_s is None:
            self.zero_since_s = trio.current_time()
        self.told.append((f"{voltage_v:g} V", self.amperes()))

    async def output(self, on: bool) -> None:
        await super().output(on)
        self.told.append(("on" if on else "off", self.amperes()))

    async def read(self) -> SupplyReading:
        seen = await super().read()
        return SupplyReading(
            voltage_set_v=seen.voltage_set_v,
            limit_set_a=seen.limit_set_a,
            voltage_v=seen.voltage_v,
            current_a=self.amperes(),
            output_on=seen.output_on,
        )


def holding(supply: IntoInductor, bench: Bench) -> tuple[Source, Ledger]:
    """A source that holds a current through an inductor at position 1."""
    ledger = Ledger(permit(nominal_f=0.0, kind=Kind.INDUCTOR), ("1", "2"))
    ledger.source = SourceState.HOLDING
    equipment = bench.equipment()
    board = Switchboard(scanner=equipment.scanner, wiring=bench.wired, ledger=ledger)
    source = Source(
        equipment=type(equipment)(
            supply=supply,
            current_meter=equipment.current_meter,
            voltmeter=equipment.voltmeter,
            scanner=equipment.scanner,
            interlock=equipment.interlock,
        ),
        facts=facts(),
        wiring=bench.wired,
        ledger=ledger,
        board=board,
        time=_Loop(),
    )
    return source, ledger


class _Loop:
    def now_s(self) -> float:
        return trio.current_time()

    async def sleep(self, seconds: float) -> None:
        await trio.sleep(seconds)


def bench_with_current() -> Bench:
    bench = Bench(parts={"1": Part(farad=1e-9), "2": Part(farad=1e-9)})
    bench.on, bench.set_v = True, 5.0
    for channel in ("1", "2", "101", "102"):
        bench.relays[channel].powered = True
    return bench


@pytest.mark.parametrize("inductor", [True, False])
def test_the_order_of_a_trip(inductor):
    """With an inductor: 0 V, wait for the current, then off. Else: off first, at once."""

    async def main() -> None:
        bench = bench_with_current()
        supply = IntoInductor(bench)
        source, ledger = holding(supply, bench)
        await source.trip(inductor=inductor)
        assert ledger.source is SourceState.TRIPPED
        assert not bench.on
        first, amperes = supply.told[0]
        if inductor:
            assert first == "0 V"
            off_at = next(amperes for what, amperes in supply.told if what == "off")
            assert off_at <= facts().supply_error_a
        else:
            assert (first, amperes) == ("off", 2.0)
        assert bench.made(bench.wired.supply)  # nothing has opened while current flowed

    virtual(main)


def test_a_current_that_stays_is_switched_off_all_the_same():
    async def main() -> None:
        bench = bench_with_current()
        supply = IntoInductor(bench, persists=True)
        source, ledger = holding(supply, bench)
        began_s = trio.current_time()
        await source.trip(inductor=True)
        assert trio.current_time() - began_s < 12.0  # ten seconds of patience, and the replies
        assert not bench.on
        assert ledger.source is SourceState.TRIPPED

    virtual(main)


def test_an_end_is_an_end():
    async def main() -> None:
        bench = bench_with_current()
        source, ledger = holding(IntoInductor(bench), bench)
        await source.trip(inductor=False)
        source.isolated(proven=True)
        assert ledger.source is SourceState.ENDED_PROVEN
        ledger.source_event(SourceEvent.TEST)
        await source.trip(inductor=True)
        assert ledger.source is SourceState.ENDED_PROVEN

    virtual(main)
