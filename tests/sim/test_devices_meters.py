"""The other simulated impedance meters against their protocol pages and circuit theory."""

import binascii
import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.sim import noise
from ohmward.sim.bridge import Drive, Reading
from ohmward.sim.handheld_meter import HandheldMeter, checksum, frame_of, line_of
from ohmward.sim.meter_error import MeterError, MeterFigures
from ohmward.sim.status_first_meter import StatusFirstMeter

EXACT = MeterFigures(
    knots=((20.0, 0.0, 0.0), (2e6, 0.0, 0.0)),
    short_ohm=0.0,
    open_s=0.0,
    frequency_rel=0.0,
    noise={"SHOR": 0.0, "MED": 0.0, "LONG": 0.0},
)


class Capacitor:
    """100 nF with D = 0.01 at every frequency, or nothing at all."""

    key = "C1"
    present = True

    def impedance(
        self, frequency_hz: float, level_v: float, bias_v: float, bias_a: float
    ) -> complex:
        if not self.present:
            return complex(math.inf, 0.0)
        x = 1 / (2 * math.pi * frequency_hz * 100e-9)
        return complex(0.01 * x, -x)

    def resistance_dc_ohm(self) -> float:
        return math.inf

    def short_impedance(self, frequency_hz: float) -> complex:
        return 0j

    def open_impedance(self, frequency_hz: float) -> complex:
        return complex(math.inf, 0.0)


class Leads:
    def __init__(self) -> None:
        self.part = Capacitor()
        self.moved_s = -math.inf

    def connection(self, now_s: float) -> Capacitor:
        return self.part

    def changed_s(self, now_s: float) -> float:
        return self.moved_s if now_s >= self.moved_s else -math.inf


def error() -> MeterError:
    return MeterError(EXACT, noise.normal, 1, "m")


# -- status first


def status_first(leads: Leads | None = None) -> StatusFirstMeter:
    return StatusFirstMeter("m", "8", leads or Leads(), error())


def ask(meter: StatusFirstMeter, message: str, now_s: float) -> str:
    meter.receive(message.encode() + b"\n", now_s)
    return meter.take(now_s + 5.0).decode().rstrip("\n")


def test_status_first_measures_and_throws_the_first_reading_away() -> None:
    meter = status_first()
    assert ask(meter, "*IDN?", 1.0) == "GENERIC,IMPEDANCE-METER-S,8,2.1"
    assert ask(meter, "FUNC CSD;:FREQ 10000;FREQ?", 2.0) == " 1.00000E+04"
    assert ask(meter, "*TRG;*WAI;FETC?", 3.0) != ask(meter, "*TRG;*WAI;FETC?", 10.0)
    assert ask(meter, "*TRG;*WAI;FETC?", 20.0) == "N, 1.00000E-07, 1.00000E-02"
    assert ask(meter, "FETC?", 30.0) == "N, 1.00000E-07, 1.00000E-02"


def test_status_first_times_and_condition() -> None:
    meter = status_first()
    meter.receive(b"FREQ 100;:APER SHOR\n", 1.0)
    assert ask(meter, "APER?", 1.5) == "SHORT"
    meter.receive(b"*TRG;*WAI;FETC?\n", 10.0)
    assert meter.due_s() == pytest.approx(10.0 + 3 / 100)
    meter.take(20.0)
    meter.receive(b"FREQ 1000;:APER LONG\n*TRG;*WAI;FETC?\n", 20.0)
    assert meter.due_s() == pytest.approx(20.16)
    meter.take(20.2)
    assert ask(meter, "STAT:OPER:COND?", 30.0) == "0"
    assert ask(meter, "STAT:OPER?", 31.0) == "16", "bit 4 was set while it measured"


def test_status_first_takes_the_nearest_frequency_and_only_its_levels() -> None:
    meter = status_first()
    assert ask(meter, "FREQ 115;FREQ?", 1.0) == " 1.20000E+02"
    assert ask(meter, "VOLT 0.3;VOLT?", 2.0) == " 3.00000E-01"
    assert ask(meter, "VOLT 0.5;VOLT?", 3.0) == " 3.00000E-01"
    assert ask(meter, "SYST:ERR?", 4.0).startswith("-222,")


def test_status_first_says_what_is_wrong() -> None:
    leads = Leads()
    leads.part.present = False
    assert ask(status_first(leads), "*TRG;*WAI;FETC?", 1.0) == "O, 9.90000E+37, 9.90000E+37"
    leads = Leads()
    leads.moved_s = 1.01
    assert ask(status_first(leads), "*TRG;*WAI;FETC?", 1.0) == "U, 9.91000E+37, 9.91000E+37"


# -- handheld


def test_lines_come_four_times_a_second_without_being_asked() -> None:
    meter = HandheldMeter(Leads(), error(), line_of)
    meter.opened(10.1)
    assert meter.due_s() == 10.25
    assert meter.take(10.2) == b""
    assert meter.take(10.25) == b"P=CSD A=+100.00n B=+10.00m F=1k V=0.60 S=0\r\n"
    assert meter.take(11.3).count(b"\r\n") == 4
    assert meter.take(11.3) == b""


def test_output_that_nobody_reads_for_long_is_lost() -> None:
    meter = HandheldMeter(Leads(), error(), line_of)
    meter.opened(0.0)
    assert 30 <= meter.take(86400.0).count(b"\r\n") <= 42


def test_a_key_press_leaves_old_numbers_under_new_labels_once() -> None:
    meter = HandheldMeter(Leads(), error(), line_of)
    meter.opened(10.1)
    meter.take(10.3)
    meter.press(pair="RX", frequency_hz=1e4, now_s=10.4)
    assert meter.take(10.5) == b"P=RX A=+100.00n B=+10.00m F=10k V=0.60 S=0\r\n"
    # X = −1/(2π·10 kHz·100 nF) = −159.15 Ω, R = X/100
    assert meter.take(10.75) == b"P=RX A=+1.5915 B=-159.2 F=10k V=0.60 S=0\r\n"
    with pytest.raises(ValueError, match="keys"):
        meter.press(pair="GB")
    with pytest.raises(ValueError, match="no key"):
        meter.press(frequency_hz=50.0)


def test_states() -> None:
    leads = Leads()
    meter = HandheldMeter(leads, error(), line_of)
    meter.opened(0.0)
    leads.moved_s = 1.1
    lines = meter.take(1.75).split(b"\r\n")
    assert [line[-1:] for line in lines[:-1]] == [b"0"] * 4 + [b"3", b"0", b"0"]
    meter.run_down()
    assert meter.take(2.0).endswith(b"S=2\r\n")
    leads.part.present = False
    meter = HandheldMeter(leads, error(), line_of)
    meter.opened(4.0)
    assert meter.take(4.25) == b"P=CSD A=+9.9E37 B=+9.9E37 F=1k V=0.60 S=1\r\n"


def read_frame(frame: bytes) -> tuple[int, int, float, float, int]:
    """A frame by the table of the page: pair, frequency, first, second, counter."""
    assert len(frame) == 16
    assert frame[:2] == b"\xa5\x5a"
    # CRC-16 of polynomial 0x1021 from the standard library, which starts where it is told
    assert binascii.crc_hqx(frame[2:14], 0xFFFF) == int.from_bytes(frame[14:], "big")
    signs = [-1 if frame[3] & bit else 1 for bit in (0x40, 0x80)]
    values = [
        sign * int(frame[at : at + 3].hex()) * 10.0 ** (frame[at + 3] - 15)
        for sign, at in zip(signs, (4, 8), strict=True)
    ]
    return frame[2] & 0xF, frame[2] >> 4, values[0], values[1], frame[12] | frame[13] << 8


def test_frames_hold_the_same_numbers() -> None:
    meter = HandheldMeter(Leads(), error(), frame_of)
    meter.opened(10.1)
    pair, frequency, first, second, counter = read_frame(meter.take(10.25))
    assert (pair, frequency) == (0, 2)
    assert first == pytest.approx(100e-9, rel=1e-5)
    assert second == pytest.approx(0.01, rel=1e-5)
    assert read_frame(meter.take(10.5))[4] == counter + 1


magnitudes = st.floats(1e-12, 9e5) | st.just(0.0)
numbers = st.builds(lambda m, s: s * m, magnitudes, st.sampled_from([-1.0, 1.0]))


@pytest.mark.slow
@given(numbers, numbers, st.integers(0, 0xFFFF))
def test_any_number_fits_a_frame(first: float, second: float, counter: int) -> None:
    frame = frame_of(Drive(pair="RX"), Reading(first, second, 0, 0.6, 0.0), 0, counter)
    _, _, shown_first, shown_second, shown_counter = read_frame(frame)
    assert shown_counter == counter
    for value, shown in ((first, shown_first), (second, shown_second)):
        # six digits, and no decimals where the multiplier is 1
        assert shown == pytest.approx(value, rel=5.1e-6, abs=0.51 if abs(value) > 99999 else 5e-16)


LINE = re.compile(
    rb"P=RX A=([+-])([\d.]+)([pnumkM]?) B=([+-])([\d.]+)([pnumkM]?) F=1k V=0\.60 S=0\r\n"
)
FACTORS = {
    b"p": 1e-12, b"n": 1e-9, b"u": 1e-6, b"m": 1e-3, b"": 1.0, b"k": 1e3, b"M": 1e6,
}  # fmt: skip


@pytest.mark.slow
@given(numbers, numbers)
def test_any_number_fits_a_line(first: float, second: float) -> None:
    line = line_of(Drive(pair="RX"), Reading(first, second, 0, 0.6, 0.0), 0, 1)
    found = LINE.fullmatch(line)
    assert found is not None, line
    for value, digits, (sign, text, letter) in (
        (first, 5, found.group(1, 2, 3)),
        (second, 4, found.group(4, 5, 6)),
    ):
        shown = float(sign + text) * FACTORS[letter]
        assert shown == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits), abs=1e-15)
        assert len(text.replace(b".", b"")) <= digits


def test_the_check_of_a_frame_is_the_catalogued_one() -> None:
    # the catalogue's check value of this CRC (start 0xFFFF) over "123456789" is 0x29B1
    assert checksum(b"123456789") == 0x29B1
