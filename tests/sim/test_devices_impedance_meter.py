"""The simulated impedance meter against circuit theory and its own protocol page."""

import cmath
import hashlib
import math
from itertools import pairwise
from statistics import NormalDist, fmean, pstdev

import pytest

from ohmward.sim.impedance_meter import ImpedanceMeter
from ohmward.sim.meter_error import MeterError, MeterFigures


def normal(seed: int, *key: object) -> float:
    digest = hashlib.blake2b(repr((seed, key)).encode(), digest_size=8).digest()
    return NormalDist().inv_cdf((int.from_bytes(digest, "big") + 0.5) / 2.0**64)


class SeriesPart:
    """Rs + 1/(jωC) or Rs + jωL, whose C may fall with bias, in a fixture of its own."""

    def __init__(
        self,
        key: str,
        *,
        rs_ohm: float = 0.0,
        c_f: float = 0.0,
        l_h: float = 0.0,
        droop_per_v: float = 0.0,
        residual_ohm: complex = 0.0,
        stray_f: float = 0.0,
    ) -> None:
        self.key = key
        self.rs_ohm, self.c_f, self.l_h = rs_ohm, c_f, l_h
        self.droop_per_v, self.residual_ohm, self.stray_f = droop_per_v, residual_ohm, stray_f
        self.bias_seen: list[tuple[float, float]] = []

    def part(self, frequency_hz: float, bias_v: float) -> complex:
        w = 2 * math.pi * frequency_hz
        z = complex(self.rs_ohm, w * self.l_h)
        if self.c_f:
            z += 1 / (1j * w * self.c_f * (1 - self.droop_per_v * abs(bias_v)))
        return z

    def impedance(
        self, frequency_hz: float, level_v: float, bias_v: float, bias_a: float
    ) -> complex:
        self.bias_seen.append((bias_v, bias_a))
        y = 1 / self.part(frequency_hz, bias_v) + 2j * math.pi * frequency_hz * self.stray_f
        return self.residual_ohm + 1 / y

    def resistance_dc_ohm(self) -> float:
        return math.inf if self.c_f else self.rs_ohm

    def short_impedance(self, frequency_hz: float) -> complex:
        return complex(self.residual_ohm)

    def open_impedance(self, frequency_hz: float) -> complex:
        return self.residual_ohm + 1 / (2j * math.pi * frequency_hz * self.stray_f)


class Nothing:
    key = ""

    def impedance(
        self, frequency_hz: float, level_v: float, bias_v: float, bias_a: float
    ) -> complex:
        return complex(math.inf, 0.0)

    def resistance_dc_ohm(self) -> float:
        return math.inf

    def short_impedance(self, frequency_hz: float) -> complex:
        return 0j

    def open_impedance(self, frequency_hz: float) -> complex:
        return complex(math.inf, 0.0)


class Leads:
    def __init__(self, connected: SeriesPart | Nothing) -> None:
        self.connected = connected
        self.moved_s = -math.inf

    def connection(self, now_s: float) -> SeriesPart | Nothing:
        return self.connected

    def changed_s(self, now_s: float) -> float:
        return self.moved_s if now_s >= self.moved_s else -math.inf


EXACT = MeterFigures(
    knots=((20.0, 0.0, 0.0), (2e6, 0.0, 0.0)),
    short_ohm=0.0,
    open_s=0.0,
    frequency_rel=0.0,
    noise={"SHOR": 0.0, "MED": 0.0, "LONG": 0.0},
)


def meter_of(
    connected: SeriesPart | Nothing, figures: MeterFigures = EXACT, seed: int = 1
) -> ImpedanceMeter:
    return ImpedanceMeter("meter", "1001", Leads(connected), MeterError(figures, normal, seed, "m"))


def read(meter: ImpedanceMeter, message: str = "READ?", at_s: float = 100.0) -> list[float]:
    meter.receive(message.encode() + b"\n", at_s)
    return [float(each) for each in meter.take(at_s + 60.0).decode().split(",")]


W = 2 * math.pi * 1000.0

# 1 µF with D = 0.1 at 1 kHz (shared facts: Rs, |Z|, θ, Cp and Rp computed from the definitions)
LOSSY = {"rs_ohm": 15.9154943092, "c_f": 1e-6}


@pytest.mark.parametrize(
    ("pair", "first", "second"),
    [
        ("RX", 15.9154943092, -159.154943092),
        ("ZTR", 159.948738256, math.radians(-84.2894068625)),
        ("CSD", 1e-6, 0.1),
        ("CPD", 0.990099009901e-6, 0.1),
        ("CSRS", 1e-6, 15.9154943092),
        ("CPRP", 0.990099009901e-6, 1607.46492523),
        ("CPG", 0.990099009901e-6, 1 / 1607.46492523),
        ("GB", 1 / 1607.46492523, W * 0.990099009901e-6),
    ],
)
def test_a_capacitor_in_every_pair(pair: str, first: float, second: float) -> None:
    meter = meter_of(SeriesPart("C1", **LOSSY))
    values = read(meter, f'FUNC "{pair}";:READ?')
    assert values[:2] == [pytest.approx(first, rel=1e-6), pytest.approx(second, rel=1e-6)]
    assert values[2] == 0


@pytest.mark.parametrize(
    ("pair", "first", "second"),
    # 1 mH + 10 Ω at 10 kHz: Q 6.28318530718, Lp 1.02533029591 mH, Rp 404.784176044 Ω (shared facts)
    [
        ("LSQ", 1e-3, 6.28318530718),
        ("LSD", 1e-3, 1 / 6.28318530718),
        ("LSRS", 1e-3, 10.0),
        ("LPQ", 1.02533029591e-3, 6.28318530718),
        ("LPD", 1.02533029591e-3, 1 / 6.28318530718),
        ("LPRP", 1.02533029591e-3, 404.784176044),
        ("LPG", 1.02533029591e-3, 1 / 404.784176044),
    ],
)
def test_an_inductor_in_every_pair(pair: str, first: float, second: float) -> None:
    meter = meter_of(SeriesPart("L1", rs_ohm=10.0, l_h=1e-3))
    values = read(meter, f'FREQ 10 KHZ;FUNC "{pair}";:READ?')
    assert values[:2] == [pytest.approx(first, rel=1e-6), pytest.approx(second, rel=1e-6)]


def test_the_source_resistance_takes_its_share_of_the_level() -> None:
    meter = meter_of(SeriesPart("R1", rs_ohm=100.0))
    assert read(meter, "VOLT 1;READ?")[3] == pytest.approx(0.5)
    meter = meter_of(SeriesPart("R2", rs_ohm=10.0))
    values = read(meter, "VOLT 1;READ?")
    assert values[3] == pytest.approx(10 / 110)
    assert values[2] == 3, "less than half of the level is left"
    assert values[0] == pytest.approx(10.0, rel=1e-6), "and yet the value holds"


@pytest.mark.parametrize(
    ("aperture", "frequency_hz", "duration_s"),
    [("SHOR", 1e3, 0.010), ("MED", 1e3, 0.060), ("LONG", 1e3, 0.250), ("SHOR", 20.0, 0.100)],
)
def test_a_measurement_takes_its_aperture_or_two_periods(
    aperture: str, frequency_hz: float, duration_s: float
) -> None:
    meter = meter_of(SeriesPart("C1", **LOSSY))
    meter.receive(f"APER {aperture};:FREQ {frequency_hz};:RANG 100\n".encode(), 10.0)
    meter.receive(b"READ?\n", 20.0)
    assert meter.due_s() == pytest.approx(20.0 + duration_s, abs=1e-12)
    meter.take(30.0)
    meter.receive(b"FREQ 2000\n", 30.0)
    meter.receive(b"READ?\n", 30.0)
    integration_s = {"SHOR": 0.010, "MED": 0.060, "LONG": 0.250}[aperture]
    assert meter.due_s() == pytest.approx(30.0 + 0.020 + 2 / 2000 + integration_s, abs=1e-12)


def test_fetch_answers_the_last_reading_and_nothing_before_there_is_one() -> None:
    meter = meter_of(SeriesPart("C1", **LOSSY))
    meter.receive(b"FETC?\nSYST:ERR?\n", 1.0)
    assert meter.take(1.0).startswith(b"-230,")
    last = read(meter)
    assert read(meter, "FETC?", 300.0) == last


def test_a_big_capacitor_is_charged_through_the_source_resistance() -> None:
    # v(t) = V(1 − e^(−t/RC)) with R = 100 Ω, C = 1 mF: 0.1 s
    meter = meter_of(SeriesPart("C1", c_f=1e-3, rs_ohm=0.1))
    meter.receive(b"APER SHOR;:FREQ 1000;:RANG 1;:VOLT:OFFS 10;OFFS:STAT ON\n", 100.0)
    meter.receive(b"READ?\n", 100.0)
    values = meter.take(200.0).split(b",")
    at_s = 0.020 + 2 / 1000 + 0.010
    assert float(values[4]) == pytest.approx(10 * (1 - math.exp(-at_s / 0.1)), rel=1e-6)
    assert read(meter, "READ?", 300.0)[4] == pytest.approx(10.0)
    meter.receive(b"VOLT:OFFS:STAT OFF\n", 400.0)
    meter.receive(b"READ?\n", 400.0)
    values = meter.take(500.0).split(b",")
    assert float(values[4]) == pytest.approx(10 * math.exp(-at_s / 0.1), rel=1e-6)


def test_bias_reaches_the_part() -> None:
    capacitor = SeriesPart("C1", c_f=1e-7, droop_per_v=0.02)
    meter = meter_of(capacitor)
    assert read(meter, 'FUNC "CSD";:VOLT:OFFS 10;OFFS:STAT ON;:READ?')[0] == pytest.approx(0.8e-7)
    assert read(meter, "VOLT:OFFS:STAT OFF;:READ?", 200.0)[0] == pytest.approx(1e-7)
    inductor = SeriesPart("L1", rs_ohm=2.0, l_h=1e-3)
    meter = meter_of(inductor)
    assert read(meter, "CURR:OFFS 0.05;OFFS:STAT ON;:READ?")[4] == pytest.approx(0.1)
    assert inductor.bias_seen[-1] == (pytest.approx(0.1), 0.05)
    resistor = SeriesPart("R1", rs_ohm=300.0)
    meter = meter_of(resistor)
    assert read(meter, "VOLT:OFFS 4;OFFS:STAT ON;:READ?")[4] == pytest.approx(3.0)
    assert resistor.bias_seen[-1] == (pytest.approx(3.0), pytest.approx(0.01))


def test_only_one_kind_of_bias_is_on() -> None:
    meter = meter_of(SeriesPart("R1", rs_ohm=300.0))
    states = "VOLT:OFFS:STAT?;:CURR:OFFS:STAT?"
    assert read(meter, "VOLT:OFFS:STAT ON;:VOLT:OFFS:STAT?") == [1]
    meter.receive(f"CURR:OFFS:STAT ON;:{states}\n".encode(), 200.0)
    assert meter.take(200.0) == b"0;1\n"
    meter.receive(f"*RST;:{states}\n".encode(), 300.0)
    assert meter.take(300.0) == b"0;0\n"


def test_what_cannot_be_measured_has_a_status_and_no_number() -> None:
    shorted = meter_of(SeriesPart("S", rs_ohm=0.01))
    assert read(shorted, "RANG 1000;:READ?")[:3] == [9.9e37, 9.9e37, 1], "held range overloads"
    assert read(shorted, "RANG:AUTO ON;:READ?", 300.0)[2] == 3
    assert read(shorted, "VOLT:OFFS 20;OFFS:STAT ON;:READ?", 600.0)[2] == 1, "0.2 A of offset"
    assert read(meter_of(Nothing()))[:3] == [9.9e37, 9.9e37, 1]
    leads = Leads(SeriesPart("C1", **LOSSY))
    leads.moved_s = 100.05  # a contact moves while the meter integrates
    meter = ImpedanceMeter("meter", "1001", leads, MeterError(EXACT, normal, 1, "m"))
    assert read(meter, "APER LONG;:READ?", 100.0)[:3] == [9.91e37, 9.91e37, 2]
    assert read(meter, "READ?", 200.0)[2] == 0


def test_ranges_have_hysteresis() -> None:
    part = SeriesPart("R1", rs_ohm=1000.0)
    meter = meter_of(part)
    ranges = []
    # the end of the 1 kΩ range is at 3162 Ω; it is kept until 10 % beyond, coming from either side
    for at_s, ohm in enumerate((1000.0, 3300.0, 3600.0, 3300.0, 3000.0, 2800.0), 1):
        part.rs_ohm = ohm
        ranges.append(read(meter, "READ?", 100.0 * at_s)[5])
    assert ranges == [1e3, 1e3, 1e4, 1e4, 1e4, 1e3]
    assert read(meter, "RANG 50;:RANG?", 1000.0) == [100.0]
    assert read(meter, "RANG:AUTO?", 1100.0) == [0]


def test_its_own_correction_takes_the_fixture_out() -> None:
    part = SeriesPart("C1", c_f=1e-9, rs_ohm=5.0, residual_ohm=0.3 + 2j, stray_f=4e-12)
    meter = meter_of(part)
    truth = part.part(100e3, 0.0)
    raw = complex(*read(meter, "FREQ 100000;:READ?")[:2])
    assert abs(raw / truth - 1) > 1e-3
    both = complex(*read(meter, "CORR:OPEN ON;SHOR ON;:READ?", 200.0)[:2])
    assert abs(both / truth - 1) < 1e-5
    assert read(meter, "CORR:OPEN?", 300.0) == [1]


def test_a_wrong_cable_length_turns_the_phase() -> None:
    figures = MeterFigures(**{**vars_of(EXACT), "cable_m": 1.0})
    meter = meter_of(SeriesPart("R1", rs_ohm=1e3), figures)
    values = read(meter, 'FUNC "ZTR";:FREQ 1E6;:READ?')
    assert values[1] == pytest.approx(2 * math.pi * 1e6 * 5e-9, rel=1e-5)
    assert read(meter, "CORR:LENG 1;:READ?", 200.0)[1] == pytest.approx(0.0, abs=1e-6)


def vars_of(figures: MeterFigures) -> dict[str, object]:
    return {name: getattr(figures, name) for name in MeterFigures.__dataclass_fields__}


def relative_error(seed: int, part: str, frequency_hz: float = 1e3) -> complex:
    connected = SeriesPart(part, rs_ohm=1e3)
    meter = meter_of(connected, MeterFigures(noise={"SHOR": 0.0, "MED": 0.0, "LONG": 0.0}), seed)
    seen = complex(*read(meter, f"FREQ {frequency_hz};:READ?")[:2])
    return cmath.log(seen / 1e3)  # real: magnitude; imaginary: phase


def test_the_error_stays_for_a_part_and_differs_between_instruments_and_parts() -> None:
    again = [relative_error(1, "C1") for _ in range(2)]
    assert again[0] == again[1]
    others = {relative_error(1, "C2"), relative_error(2, "C1"), again[0]}
    assert len(others) == 3


@pytest.mark.slow
def test_the_error_is_within_its_figures_and_evenly_spread_in_magnitude_and_phase() -> None:
    figures = MeterFigures()
    widths = figures.half_widths(1e3, 1e3, 1.0)
    shares = [relative_error(seed, "C1") for seed in range(300)]
    for number, values in enumerate(([s.real for s in shares], [s.imag for s in shares])):
        scaled = [value / widths[number] for value in values]
        assert max(map(abs, scaled)) <= 1.001  # seven digits of the answer
        # uniform over −1 … 1: mean 0, deviation 1/√3; bounds are five deviations of 300 draws
        assert abs(fmean(scaled)) < 5 * 0.577 / math.sqrt(300)
        assert pstdev(scaled) == pytest.approx(1 / math.sqrt(3), rel=0.13)


def test_the_error_depends_smoothly_on_frequency() -> None:
    figures = MeterFigures()
    error = MeterError(figures, normal, 5, "m")
    frequencies = [20.0 * 10 ** (k / 100) for k in range(500)]
    shares = [error.share("C1", f)[0] for f in frequencies]
    steps = [abs(b - a) for a, b in pairwise(shares)]
    assert max(steps) < 0.08, "no step within a hundredth of a decade"
    assert max(shares) - min(shares) > 0.05, "and yet not the same everywhere"


def test_noise_falls_with_integration_and_is_the_same_for_the_same_seed() -> None:
    def spread(aperture: str) -> tuple[float, list[float]]:
        meter = meter_of(SeriesPart("R1", rs_ohm=1e3), MeterFigures())
        meter.receive(f"APER {aperture};:RANG 1000\n".encode(), 0.0)
        values = [read(meter, "READ?", 100.0 * k)[0] for k in range(1, 200)]
        return pstdev(values) / 1e3, values

    short, medium, long = (spread(each) for each in ("SHOR", "MED", "LONG"))
    assert short[0] > medium[0] > long[0] > 0
    assert short[0] == pytest.approx(6e-5, rel=0.25)
    assert spread("SHOR")[1] == short[1]


def test_out_of_range_is_refused_and_the_old_value_stays() -> None:
    meter = meter_of(SeriesPart("C1", **LOSSY))
    for bad, good, value in (
        ("FREQ 19", "FREQ?", 1e3),
        ("FREQ 2.1 MHZ", "FREQ?", 1e3),
        ("VOLT 4 MV", "VOLT?", 1.0),
        ("VOLT:OFFS -40.1", "VOLT:OFFS?", 0.0),
        ("CURR:OFFS 0.11", "CURR:OFFS?", 0.0),
        ("CORR:LENG 5", "CORR:LENG?", 0.0),
    ):
        meter.receive(f"*CLS;:{bad}\n:SYST:ERR?\n".encode(), 1.0)
        assert meter.take(1.0).startswith(b"-222,"), bad
        assert read(meter, good) == [value]


def test_the_usual_reading_takes_few_instructions() -> None:
    """A bound on work, counted in calls, as time is measured in benchmarks only."""
    import sys

    meter = meter_of(SeriesPart("C1", **LOSSY), MeterFigures())
    read(meter)
    calls = 0

    def count(frame: object, event: str, argument: object) -> None:
        nonlocal calls
        calls += event == "call"

    sys.setprofile(count)
    try:
        meter.receive(b"READ?\n", 1000.0)
        meter.due_s()
        meter.take(2000.0)
    finally:
        sys.setprofile(None)
    assert calls < 60
