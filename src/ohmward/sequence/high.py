"""What a bench gives the stages under direct voltage: its path, its instruments, its laws."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from math import inf

from ohmward.safety.permit import (
    Laws,
    charging_time_s,
    discharge_wait_s,
    ramp_v_per_s,
    short_target_v,
)
from ohmward.safety.wiring import PositionWiring, Wiring, wiring_of
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver
from ohmward.setup.high_voltage import HighVoltage, HighVoltagePosition
from ohmward.terms.accuracy import RangeAccuracy
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part
from ohmward.terms.role import Role

RELAYS_S = 0.1  # for relays and instruments to settle, where no driver says
TEST_S = 10.0  # the pass at 1 V or less that comes before a part is charged
UNKNOWN_LOW, UNKNOWN_HIGH = 0.5, 2.0  # of nominal, where the list states no tolerance
MOMENT_S = 0.1  # a voltmeter's reading, where its driver does not say


def capacitance_bounds(part: Part) -> tuple[float, float]:
    """Between what a part's capacitance lies (F): its marked tolerance; 0 for what stores none."""
    if part.kind is not Kind.CAPACITOR:
        return 0.0, 0.0
    low = UNKNOWN_LOW if part.tolerance_low is None else 1.0 + part.tolerance_low
    high = UNKNOWN_HIGH if part.tolerance_high is None else 1.0 + part.tolerance_high
    return part.nominal * low, part.nominal * high


@dataclass(frozen=True, kw_only=True, slots=True)
class High:
    """The path of high voltage with what drivers say of its instruments; None where unknown.

    Without a bench or a path nothing is held against a stage, so that everything else is
    still checked in the same go.
    """

    path: HighVoltage | None = None
    wiring: Wiring | None = None
    drivers: Mapping[Role, Driver] = field(default_factory=dict)
    laws: Laws = field(default_factory=Laws)

    def place(self, part: Part) -> HighVoltagePosition | None:
        """The path to a part's position."""
        return None if self.path is None else self.path.at(part.position)

    def wired(self, part: Part) -> PositionWiring | None:
        """The same as the safety rules see it."""
        return None if self.wiring is None else self.wiring.at(part.position)

    @property
    def limit_a(self) -> float:
        """The current limit that the supply is given (A)."""
        if self.path is None:
            return inf
        return min(self.path.current_ceiling_a, self.most("current_limit"))

    def most(self, setting: str) -> float:
        """The largest value of a setting of the supply; infinite where nobody says."""
        supply = self.drivers.get(Role.HIGH_VOLTAGE_SUPPLY)
        found = None if supply is None else supply.setting.get(setting)
        return inf if found is None or found.maximum is None else found.maximum

    def node_f(self) -> float:
        """What lies on the rail beside the part (F)."""
        return 0.0 if self.wiring is None else self.wiring.node_capacitance_f()

    def ramp(self, asked_v_per_s: float, part: Part) -> float:
        """min(asked, 0.8·I_limit/C_max), the rail's capacitance included (V/s)."""
        return ramp_v_per_s(
            self.laws,
            asked_v_per_s=asked_v_per_s,
            limit_a=self.limit_a,
            capacitance_max_f=capacitance_bounds(part)[1] + self.node_f(),
        )

    def up_s(self, change_v: float, ramp: float, part: Part) -> float:
        """From the first command to a settled part (s)."""
        wired = self.wired(part)
        return charging_time_s(
            self.laws,
            change_v=change_v,
            ramp_v_per_s=ramp,
            series_ohm=0.0 if wired is None else wired.series_ohm,
            capacitance_f=capacitance_bounds(part)[1],
        )

    def discharge_s(self, part: Part, from_v: float) -> float:
        """From a voltage until the direct short may close: R·C_max·ln(U0/U) (s)."""
        wired = self.wired(part)
        if wired is None:
            return 0.0
        return discharge_wait_s(
            resistance_ohm=wired.series_ohm + wired.discharge_ohm,
            capacitance_max_f=capacitance_bounds(part)[1] + self.node_f(),
            from_v=from_v,
            target_v=short_target_v(self.laws, wired),
        )

    def around_s(self, part: Part, from_v: float) -> float:
        """What a stage takes besides its own time: proven, tested, and down and proven again."""
        proof_s = self.laws.first_short_s + self.laws.rebound_wait_s + RELAYS_S
        return 2 * proof_s + TEST_S + self.discharge_s(part, from_v)

    def ranges(self, role: Role) -> tuple[RangeAccuracy, ...]:
        """The ranges of a meter that reads one number, rising; empty where its driver has none."""
        driver = self.drivers.get(role)
        accuracy = None if driver is None else driver.scalar_accuracy
        found = () if accuracy is None else accuracy.ranges
        return tuple(sorted(found, key=lambda one: one.full_scale))

    def moment_s(self) -> float:
        """How long a voltmeter is connected for one reading (s)."""
        meter = self.drivers.get(Role.VOLTMETER)
        scanner = self.drivers.get(Role.SCANNER)
        times = () if meter is None else tuple(meter.timing.reading.values())
        relays_s = 0.0 if scanner is None else scanner.timing.settling
        return max(times, default=MOMENT_S) + (relays_s or RELAYS_S)


def high_of(bench: Bench | None, drivers: Mapping[str, Driver]) -> High:
    """What a bench and its drivers give; an empty one for a bench without a path."""
    if bench is None or bench.high_voltage is None:
        return High()
    by_role = {
        one.role: drivers[name] for name, one in bench.instruments.items() if name in drivers
    }
    path = bench.high_voltage
    wiring = wiring_of(path) if path.bypass is not None else None
    return High(path=path, wiring=wiring, drivers=by_role)
