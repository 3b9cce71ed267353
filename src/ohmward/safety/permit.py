"""What a warden may do with each part, and the laws that every request and relay obeys.

Pure: no clock (time is an argument), no link. A law that does not hold raises LawBroken; the
warden turns that into a trip. Every number is a field of :class:`Laws` or of the permit.
"""

from collections.abc import Iterable
from dataclasses import dataclass, field
from math import inf, isfinite, log, sqrt

from ohmward.errors import OhmwardError
from ohmward.safety.wiring import Contact, PositionWiring
from ohmward.terms.kind import Kind

ROUNDING = 1e-9  # a request equal to its ceiling is allowed whatever the last bit says


class LawBroken(OhmwardError):
    """A request or a relay move is against a law; ``law`` is its short name."""

    def __init__(self, law: str, message: str) -> None:
        super().__init__(f"{law}: {message}")
        self.law = law


@dataclass(frozen=True, kw_only=True, slots=True)
class Laws:
    """The numbers of the safety rules, with units; source unless stated: the rules themselves.

    limit_share: the ramp takes at most this share of the current limit (0.8).
    limit_patience: a current limit is a fault after this many expected charging times (1.5).
    settle_time_constants: a node counts as settled after this many R·C (5: within 0.7 %).
    within: the part's voltage counts as reached within this share of the set voltage (1 %).
    charge_low, charge_high: the drawn charge agrees within these shares of C_min·V and
        C_max·V; wide, because the question is whether the part is there (common practice).
    decay_low, decay_high: the same for the time constant of a discharge.
    decay_readings: a decay is resolved when this many readings fall into it (3).
    injection_v: the voltage that is injected to test a path (V); never above test_ceiling_v.
    injection_rel: how far the part's voltage may be from it (share).
    test_ceiling_v: no test voltage is above this (1 V).
    dead_v: a part below this is dead (1 V).
    target_v: the discharge resistor works down to this before the direct short closes (V).
    first_short_s: the first direct short lasts this long (s); each further one twice as long.
    rebound_wait_s: how long a part lies open before it is read again (s).
    rebounds: how often a part that charges itself up is shorted again.
    proof_valid_s: a proof expires after this time (s).
    bypass_share: the bypass opens below this share of the meter's range (half).
    meter_foreign_v: the impedance meter stands this foreign voltage (1 V unless its driver
        says otherwise).
    droop_s: how long a part is watched at most, off and not yet discharged, for the droop
        that its own divider causes (s).
    run_down_s: how long an inductor's current is waited for before its supply goes off (s).
    path_ohm: what a direct short through contacts and leads still has (ohm, common practice).
    """

    limit_share: float = 0.8
    limit_patience: float = 1.5
    settle_time_constants: float = 5.0
    within: float = 0.01
    charge_low: float = 0.5
    charge_high: float = 2.0
    decay_low: float = 0.25
    decay_high: float = 2.0
    decay_readings: int = 3
    injection_v: float = 0.8
    injection_rel: float = 0.25
    test_ceiling_v: float = 1.0
    dead_v: float = 1.0
    target_v: float = 10.0
    first_short_s: float = 2.0
    rebound_wait_s: float = 5.0
    rebounds: int = 5
    proof_valid_s: float = 300.0
    bypass_share: float = 0.5
    meter_foreign_v: float = 1.0
    droop_s: float = 2.0
    run_down_s: float = 10.0
    path_ohm: float = 0.05

    def __post_init__(self) -> None:
        if not 0.0 < self.injection_v <= self.test_ceiling_v <= 1.0:
            raise ValueError("a test voltage is above 0 V and at most 1 V")
        if not 0.0 < self.limit_share < 1.0 <= self.limit_patience:
            raise ValueError("a ramp stays below its current limit and has patience")


@dataclass(frozen=True, kw_only=True, slots=True)
class Ceiling:
    """What one part may get: voltages in V (``reverse_v`` a magnitude), current A, power W.

    ``capacitance_min_f`` and ``_max_f`` bound its capacitance (0 for a part that stores
    none). ``assumed_v`` is what it is assumed to be charged to when nobody knows.
    """

    part_id: str
    position: str
    kind: Kind
    voltage_v: float
    reverse_v: float = 0.0
    capacitance_min_f: float = 0.0
    capacitance_max_f: float = 0.0
    current_a: float = inf
    power_w: float = inf
    assumed_v: float = 0.0


@dataclass(frozen=True, kw_only=True, slots=True)
class Permit:
    """The ceilings of one run, with the hash of the brief that they were authorised with.

    ``bench_v``, ``relay_v`` and ``divider_v`` hold for every part; ``limit_a`` is the largest
    current limit that may be set on the supply.
    """

    brief_hash: str
    ceilings: tuple[Ceiling, ...]
    bench_v: float
    relay_v: float = inf
    divider_v: float = inf
    limit_a: float = inf
    laws: Laws = field(default_factory=Laws)

    def ceiling(self, part_id: str, position: str) -> Ceiling:
        """The ceiling of this part at this position; LawBroken where the permit has none."""
        for ceiling in self.ceilings:
            if ceiling.part_id == part_id and ceiling.position == position:
                return ceiling
        raise LawBroken("permit", f"it names no part {part_id} at position {position}")

    def highest_v(self, ceiling: Ceiling) -> float:
        """The least of the ceilings that hold for this part."""
        return min(ceiling.voltage_v, self.bench_v, self.relay_v, self.divider_v)

    def at_position(self, position: str) -> tuple[Ceiling, ...]:
        """All parts that may lie at this position."""
        return tuple(ceiling for ceiling in self.ceilings if ceiling.position == position)

    def assumed_v(self, position: str) -> float:
        """What a part at this position is assumed to be charged to when nobody knows (V)."""
        return max((ceiling.assumed_v for ceiling in self.at_position(position)), default=0.0)


def ceiling_v(*, rated_v: float, share: float, others_v: Iterable[float] = ()) -> float:
    """Highest voltage of a part: rating × the share that the sequence allows, or less (V)."""
    return min((rated_v * share, *others_v))


def check_brief(permit: Permit, brief_hash: str) -> None:
    """A permit is for one brief; another brief is not authorised by it."""
    if not brief_hash or permit.brief_hash != brief_hash:
        raise LawBroken("permit", "it was given for another brief; a changed brief needs its own")


def check_request(
    permit: Permit, part_id: str, position: str, *, bias_v: float, level_v: float = 0.0
) -> Ceiling:
    """Bias + √2·level below every ceiling, bias − √2·level above the reverse limit.

    Returns the ceiling of the part; raises LawBroken, also for a number that is none.
    """
    ceiling = permit.ceiling(part_id, position)
    if not (isfinite(bias_v) and isfinite(level_v)) or level_v < 0.0:
        raise LawBroken("ceiling", f"{part_id} was to get {bias_v} V with {level_v} V on it")
    swing_v = sqrt(2.0) * level_v
    highest_v = permit.highest_v(ceiling)
    if bias_v + swing_v > highest_v * (1.0 + ROUNDING):
        raise LawBroken(
            "ceiling", f"{part_id} was to get {bias_v + swing_v:.6g} V, allowed {highest_v:.6g} V"
        )
    if bias_v - swing_v < -ceiling.reverse_v * (1.0 + ROUNDING):
        raise LawBroken(
            "reverse",
            f"{part_id} was to get {bias_v - swing_v:.6g} V, allowed {-ceiling.reverse_v:.6g} V",
        )
    return ceiling


def check_limit(permit: Permit, limit_a: float) -> None:
    """A current limit is positive, finite and not above the permit's."""
    if not 0.0 < limit_a <= permit.limit_a * (1.0 + ROUNDING) or not isfinite(limit_a):
        raise LawBroken("limit", f"{limit_a} A was asked for, allowed {permit.limit_a} A")


def ramp_v_per_s(
    laws: Laws, *, asked_v_per_s: float, limit_a: float, capacitance_max_f: float
) -> float:
    """Ramp rate: min(asked, 0.8·I_limit/C_max), in V/s; the node's capacitances belong in C."""
    if not asked_v_per_s > 0.0:
        raise LawBroken("ramp", f"{asked_v_per_s} V/s was asked for")
    if capacitance_max_f <= 0.0:
        return asked_v_per_s
    return min(asked_v_per_s, laws.limit_share * limit_a / capacitance_max_f)


def charging_time_s(
    laws: Laws, *, change_v: float, ramp_v_per_s: float, series_ohm: float, capacitance_f: float
) -> float:
    """Expected time from the first command to a settled part: ΔV/ramp + 5·R·C (s)."""
    return abs(change_v) / ramp_v_per_s + laws.settle_time_constants * series_ohm * capacitance_f


def limit_is_fault(laws: Laws, *, elapsed_s: float, expected_s: float) -> bool:
    """Whether a supply that still limits its current after this time is faulted (or its part)."""
    return elapsed_s > laws.limit_patience * expected_s


def discharge_wait_s(
    *, resistance_ohm: float, capacitance_max_f: float, from_v: float, target_v: float
) -> float:
    """The least time that a discharge is given: R·C_max·ln(U0/U_target) (s)."""
    if abs(from_v) <= target_v:
        return 0.0
    return resistance_ohm * capacitance_max_f * log(abs(from_v) / target_v)


def check_relay_move(contact: Contact, *, voltage_v: float, current_a: float) -> None:
    """No relay moves above its declared hot-switch voltage or current.

    ``voltage_v`` bounds the voltage across the contact while it is open, ``current_a`` the
    current through it while it is closed; what is not known is passed as inf.
    """
    if not (
        abs(voltage_v) <= contact.switch_v * (1.0 + ROUNDING)
        and abs(current_a) <= contact.switch_a * (1.0 + ROUNDING)
    ):
        raise LawBroken(
            "relay",
            f"contact {contact.channel} may move at {contact.switch_v:g} V and "
            f"{contact.switch_a:g} A; there may be {abs(voltage_v):.6g} V and "
            f"{abs(current_a):.6g} A",
        )


def closing_current_a(laws: Laws, *, voltage_v: float, resistance_ohm: float) -> float:
    """Current that a closing contact starts: V/R; up to the test voltage it closes dry (A)."""
    if abs(voltage_v) <= laws.test_ceiling_v:
        return 0.0
    return abs(voltage_v) / max(resistance_ohm, laws.path_ohm)


def short_target_v(laws: Laws, wired: PositionWiring) -> float:
    """The voltage down to which a part is discharged before its direct short may close (V).

    The least of the general target, the short's hot-switch voltage, and what its hot-switch
    current allows; never below the test voltage, where it closes dry.
    """
    by_current_v = wired.short.switch_a * max(wired.short_ohm, laws.path_ohm)
    return max(min(laws.target_v, wired.short.switch_v, by_current_v), laws.test_ceiling_v)


def check_way_down(
    laws: Laws, wired: PositionWiring, *, voltage_v: float, divider_ohm: float
) -> None:
    """Before a part is charged: its way down must be able to move at that voltage.

    The discharge closes at U with U/R, and the sense contacts may move at U with what the
    divider takes; a part that could not be brought down is not brought up.
    """
    current_a = closing_current_a(laws, voltage_v=voltage_v, resistance_ohm=wired.discharge_ohm)
    check_relay_move(wired.discharge, voltage_v=voltage_v, current_a=current_a)
    for contact in wired.sense:
        check_relay_move(contact, voltage_v=voltage_v, current_a=voltage_v / divider_ohm)
    for contact in (*wired.meter, wired.short):
        if not voltage_v <= contact.stand_off_v:
            raise LawBroken(
                "relay",
                f"contact {contact.channel} holds back {contact.stand_off_v:g} V, "
                f"not {voltage_v:g} V",
            )


def check_bypass_opening(laws: Laws, *, predicted_a: float, range_a: float) -> None:
    """The bypass opens only when the predicted current is below half the meter's range."""
    if not abs(predicted_a) < laws.bypass_share * range_a:
        raise LawBroken(
            "bypass",
            f"{abs(predicted_a):.3g} A are predicted, a range of {range_a:.3g} A allows "
            f"less than {laws.bypass_share * range_a:.3g} A",
        )


def check_meter_survives(*, voltage_v: float, series_ohm: float, meter_survives_a: float) -> None:
    """A part that shorts while the bypass is open must not destroy the current meter: V/R."""
    current_a = abs(voltage_v) / series_ohm if series_ohm > 0.0 else inf
    if not current_a <= meter_survives_a:
        raise LawBroken(
            "bypass",
            f"a part that shorts would send {current_a:.3g} A through the current meter, "
            f"which stands {meter_survives_a:.3g} A",
        )


@dataclass(frozen=True, kw_only=True, slots=True)
class Proof:
    """That a part was found dead at ``proven_s``; it expires."""

    position: str
    proven_s: float
    valid_s: float

    def holds(self, now_s: float) -> bool:
        """Whether the proof has not expired (nor comes from the future)."""
        return self.proven_s <= now_s <= self.proven_s + self.valid_s


@dataclass(frozen=True, kw_only=True, slots=True)
class Surroundings:
    """What a lease or a charge must know of the rest of the bench.

    ``joined`` are the other positions on the rail, ``live`` those of them that are not proven
    dead; ``leased`` is the one with an open lease; ``source_is_off`` that the output is read
    back off and isolated; ``scanner_is_clean`` that the scanner's link is not dirty.
    """

    joined: frozenset[str]
    live: frozenset[str]
    leased: str | None
    source_is_off: bool
    scanner_is_clean: bool


def check_lease(position: str, proof: Proof | None, around: Surroundings, *, now_s: float) -> None:
    """No lease without a proof that holds, nor beside another lease or anything energised."""
    if around.leased is not None:
        raise LawBroken("lease", f"{around.leased} has one already")
    if not around.scanner_is_clean:
        raise LawBroken("lease", "the scanner's link is dirty: nobody knows what is connected")
    if not around.source_is_off:
        raise LawBroken("lease", "the source is not proven off and isolated")
    if around.live:
        raise LawBroken("lease", f"{', '.join(sorted(around.live))} shares the rail and is live")
    if proof is None or proof.position != position or not proof.holds(now_s):
        raise LawBroken("lease", f"there is no valid proof that the part at {position} is dead")


def check_energise(around: Surroundings) -> None:
    """Nothing is energised that shares relays or a bus with an open lease or a dirty link."""
    if around.leased is not None:
        raise LawBroken("lease", f"{around.leased} has an open lease")
    if not around.scanner_is_clean:
        raise LawBroken("lease", "the scanner's link is dirty: nobody knows what is connected")
    if around.joined:
        raise LawBroken("join", f"{', '.join(sorted(around.joined))} is on the same rail")


def check_join(
    wired: Iterable[PositionWiring], dead: frozenset[str], *, least_series_ohm: float
) -> None:
    """Positions join only when all are proven dead, or each through its own resistor."""
    positions = tuple(wired)
    if len(positions) < 2 or all(each.position in dead for each in positions):
        return
    for each in positions:
        if each.series_ohm < least_series_ohm:
            raise LawBroken(
                "join",
                f"{each.position} joins others that are not proven dead through "
                f"{each.series_ohm:g} ohm, at least {least_series_ohm:g} ohm are needed",
            )


def trips_current_first(kind: Kind) -> bool:
    """Whether a trip takes the current to zero before it opens the path: for an inductor."""
    return kind is Kind.INDUCTOR
