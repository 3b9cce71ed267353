"""Every kind of fault: what leaves the instrument, and when."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.sim.faults import BABBLE_S, KINDS, Chance, Fault, FaultLayer
from ohmward.sim.scpi_device import ScpiDevice, format_number
from ohmward.sim.scpi_parameters import Number


class Plain(ScpiDevice):
    """Counts its readings, so that an old one is known for old."""

    def __init__(self) -> None:
        super().__init__("PLAIN", "11")
        self.volts = 0.0
        self.readings = 0
        self.tree.add("READ?", self._read)
        self.add_setting(
            "VOLTage",
            Number(minimum=-10.0, maximum=10.0, unit="V"),
            lambda: format_number(self.volts),
            lambda now_s, value: setattr(self, "volts", value),
        )

    def _read(self, now_s: float) -> str:
        self.readings += 1
        return format_number(float(self.readings))


def layer_with(*faults: Fault) -> FaultLayer:
    layer = FaultLayer(Plain(), seed=3)
    layer.opened(0.0)
    layer.inject(*faults)
    return layer


def send(layer: FaultLayer, message: bytes, now_s: float) -> bytes:
    layer.receive(message + b"\n", now_s)
    return layer.take(now_s)


FIRST, SECOND = b"+1.000000E+00\n", b"+2.000000E+00\n"


def test_without_a_fault_nothing_is_changed() -> None:
    layer = layer_with()
    assert send(layer, b"READ?", 1.0) == FIRST
    assert send(layer, b"READ?", 2.0) == SECOND
    assert layer.struck == []


def test_a_fault_waits_for_its_turn_and_its_message() -> None:
    layer = layer_with(Fault(kind="silent", after=1, times=2, matching=b"READ"))
    answers = [send(layer, message, 1.0) for message in (b"READ?", b"VOLT?", *[b"READ?"] * 3)]
    assert [bool(answer) for answer in answers] == [True, True, False, False, True]
    assert answers[-1] == b"+4.000000E+00\n", "what was not answered was obeyed"
    assert [kind for _, kind in layer.struck] == ["silent", "silent"]


def test_a_late_reply() -> None:
    layer = layer_with(Fault(kind="late", delay_s=3.0))
    assert send(layer, b"READ?", 1.0) == b""
    assert layer.due_s() == 4.0
    assert layer.take(3.999) == b""
    assert layer.take(4.0) == FIRST


def test_replies_stay_in_order_behind_a_late_one() -> None:
    layer = layer_with(Fault(kind="late", delay_s=3.0))
    send(layer, b"READ?", 1.0)
    assert send(layer, b"VOLT?", 2.0) == b""
    assert layer.take(4.0) == FIRST + b"+0.000000E+00\n"


def test_a_reply_in_two_halves_and_one_that_trickles() -> None:
    layer = layer_with(Fault(kind="split", delay_s=2.0))
    assert send(layer, b"READ?", 1.0) == FIRST[:7]
    assert layer.due_s() == 3.0
    assert layer.take(3.0) == FIRST[7:]
    layer.inject(Fault(kind="trickle", delay_s=0.5))
    received = send(layer, b"READ?", 10.0)
    instants = []
    while (due_s := layer.due_s()) is not None:
        instants.append(due_s)
        received += layer.take(due_s)
    assert received == SECOND
    assert instants == [10.0 + 0.5 * n for n in range(1, 14)]


def test_jitter_differs_each_time_and_stays_within_its_bound() -> None:
    layer = layer_with(Fault(kind="jitter", times=20, delay_s=1.0))
    delays = []
    for now_s in range(10, 210, 10):
        send(layer, b"READ?", float(now_s))
        due_s = layer.due_s()
        assert due_s is not None
        delays.append(due_s - now_s)
        layer.take(now_s + 5.0)
    assert len(set(delays)) == 20
    assert all(0.0 <= delay <= 1.0 for delay in delays)


@pytest.mark.parametrize("kind", ["lost", "truncated", "unterminated", "garbage", "non-ascii"])
def test_a_spoilt_reply_is_not_the_true_one(kind: str) -> None:
    layer = layer_with(Fault(kind=kind, times=50))
    for now_s in range(1, 51):
        true = b"%+.6E\n" % now_s
        spoilt = send(layer, b"READ?", float(now_s))
        assert spoilt != true
        assert spoilt.endswith(b"\n") == (kind != "unterminated") or kind == "lost"
        assert spoilt.isascii() == (kind != "non-ascii")


def test_a_decimal_comma() -> None:
    assert send(layer_with(Fault(kind="comma")), b"READ?", 1.0) == b"+1,000000E+00\n"


def test_lines_that_nobody_asked_for() -> None:
    layer = layer_with(Fault(kind="unsolicited"), Fault(kind="banner"))
    assert send(layer, b"VOLT?", 1.0) == b"+1.000000E+00\n+0.000000E+00\n"
    layer.opened(2.0)
    assert layer.take(2.0) == b"MEASURING INSTRUMENT READY\r\n"
    assert send(layer, b"READ?", 3.0) == FIRST


def test_replies_to_something_else() -> None:
    layer = layer_with(Fault(kind="stale", after=1), Fault(kind="previous", after=3))
    assert send(layer, b"READ?", 1.0) == FIRST
    assert send(layer, b"READ?", 2.0) == FIRST, "the last reply to the same query"
    assert send(layer, b"*IDN?", 3.0) == b"GENERIC,PLAIN,11,1.0\n"
    assert send(layer, b"READ?", 4.0) == b"+3.000000E+00\n"
    layer.inject(Fault(kind="previous"))
    send(layer, b"VOLT?", 5.0)
    layer.inject(Fault(kind="previous"))
    assert send(layer, b"*IDN?", 6.0) == b"+0.000000E+00\n"


def test_silent_clamping() -> None:
    layer = layer_with(Fault(kind="clamped", matching=b"VOLT"))
    send(layer, b"VOLT 4", 1.0)
    assert send(layer, b"VOLT?", 2.0) == b"+2.000000E+00\n"
    assert send(layer, b"SYST:ERR?", 3.0) == b'0,"No error"\n'
    layer.inject(Fault(kind="clamped"))
    assert send(layer, b"VOLT? MAX", 4.0) == b"+1.000000E+01\n", "a query sets nothing"
    assert send(layer, b"VOLT 8;VOLT?", 5.0) == b"+4.000000E+00\n", "set and asked in one line"


def test_another_identity_after_the_next_connection() -> None:
    layer = layer_with(Fault(kind="identity"))
    assert send(layer, b"*IDN?", 1.0) == b"GENERIC,PLAIN,11,1.0\n"
    layer.opened(2.0)
    assert send(layer, b"*IDN?", 3.0) == b"GENERIC,PLAIN,999999,1.0\n"


def test_a_busy_instrument_obeys_later_and_in_order() -> None:
    layer = layer_with(Fault(kind="busy", delay_s=5.0))
    send(layer, b"READ?", 1.0)
    send(layer, b"VOLT 3", 2.0)
    assert send(layer, b"VOLT?", 3.0) == b""
    assert layer.due_s() == 6.0
    assert layer.take(6.0) == FIRST + b"+3.000000E+00\n"


def test_a_full_error_queue() -> None:
    layer = layer_with(Fault(kind="queue-overflow"))
    assert send(layer, b"READ?", 1.0) == FIRST
    numbers = []
    while not (answer := send(layer, b"SYST:ERR?", 2.0)).startswith(b"0"):
        numbers.append(int(answer.split(b",")[0]))
    assert numbers[-1] == -350


def test_babbling_never_ends_before_the_next_connection() -> None:
    layer = layer_with(Fault(kind="babbling"))
    send(layer, b"READ?", 1.0)
    for turn in range(1, 20):
        due_s = layer.due_s()
        assert due_s is not None
        assert layer.take(1.0 + turn * 10 * BABBLE_S) == b"x" * 10
    layer.opened(5.0)
    assert layer.due_s() is None
    assert send(layer, b"READ?", 6.0) == SECOND


def test_a_dead_instrument_hears_nothing() -> None:
    layer = layer_with(Fault(kind="dead"))
    assert send(layer, b"READ?", 1.0) == b""
    assert send(layer, b"VOLT 5", 2.0) == b""
    assert layer.due_s() is None
    assert not layer.hung_up(3.0), "half-open: the connection looks well"
    layer.opened(4.0)
    assert send(layer, b"VOLT?", 5.0) == b"+0.000000E+00\n"


def test_a_dropped_connection() -> None:
    layer = layer_with(Fault(kind="disconnect", delay_s=10.0))
    assert send(layer, b"READ?", 1.0) == b""
    assert layer.hung_up(1.0)
    assert layer.refuses(10.9)
    assert not layer.refuses(11.0)
    layer.opened(11.0)
    assert not layer.hung_up(11.0)
    assert send(layer, b"READ?", 12.0) == FIRST


def test_an_unknown_kind_is_refused() -> None:
    with pytest.raises(ValueError, match="gremlin"):
        Fault(kind="gremlin")


@pytest.mark.slow
@given(st.integers(0, 1000), st.sampled_from(sorted(KINDS)))
def test_the_same_seed_gives_the_same_faults(seed: int, kind: str) -> None:
    def record() -> tuple[list[bytes], list[tuple[float, str]]]:
        layer = FaultLayer(Plain(), seed)
        layer.at_random(Chance(kinds=(kind,), share=0.3, delay_s=0.1))
        received = []
        for now_s in range(1, 20):
            received.append(send(layer, b"READ?", float(now_s)))
            if layer.hung_up(now_s):
                layer.opened(now_s + 0.5)
        return received, layer.struck

    assert record() == record()


def test_random_faults_strike_their_share() -> None:
    layer = FaultLayer(Plain(), seed=9)
    layer.at_random(Chance(kinds=("garbage", "comma"), share=0.2))
    for now_s in range(2000):
        send(layer, b"READ?", float(now_s))
    # binomial, five standard deviations: 2000·0.2 ± 5·√(2000·0.2·0.8)
    assert abs(len(layer.struck) - 400) < 90
    assert {kind for _, kind in layer.struck} == {"garbage", "comma"}
