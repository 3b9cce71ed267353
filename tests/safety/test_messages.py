"""Messages go through a line of JSON unchanged, and anything else is refused."""

from math import inf

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import ReplyMalformed
from ohmward.safety.messages import (
    Directive,
    Event,
    Held,
    Hold,
    Observation,
    Recover,
    from_line,
    to_line,
)
from ohmward.terms.status import Status

HOLD = Hold(
    part_id="C1", position="1", voltage_v=450.0, ramp_v_per_s=45.0, soak_s=300.0, every_s=1.0,
    also_s=(60.0, 120.0),
)  # fmt: skip
numbers = st.floats(allow_nan=False)


@pytest.mark.parametrize(
    "message",
    [
        HOLD,
        Recover(hold=HOLD, short_s=10.0, read_s=(900.0,)),
        Directive(),
        Directive(do="change", voltage_v=300.0),
        Held(part_id="C1", position="1", reached=True, connection="agrees", drawn_c=1e-3,
             decay="matches", bypass_shown=True),
        Event(kind="trip", position="1", detail="the interlock is open \n ±"),
    ],
)  # fmt: skip
def test_every_message_survives_its_line(message):
    line = to_line(message)
    assert line.endswith(b"\n")
    assert line.count(b"\n") == 1
    assert from_line(line) == message


@given(numbers, numbers, st.one_of(st.none(), numbers), st.sampled_from(Status), st.text())
def test_every_number_survives_its_line(since_s, volts, amperes, status, text):
    observation = Observation(
        part_id=text,
        position="1",
        since_voltage_s=since_s,
        voltage_set_v=inf,
        voltage_v=volts,
        current_a=amperes,
        divider_a=0.0,
        range_a=None,
        status=status,
    )
    assert from_line(to_line(observation)) == observation


@pytest.mark.parametrize(
    "line",
    [
        b"",
        b"{}",
        b"[]",
        b"null\n",
        b"\xff\xfe",
        b'{"message":"Hold"}',
        b'{"message":"Explode","body":{}}',
        b'{"message":"Directive","body":{"do":"explode"}}',
        b'{"message":"Directive","body":{"do":"stop","more":1}}',
        b'{"message":"Directive","body":{"do":"stop"},"more":1}',
        b'{"message":["Directive"],"body":{}}',
        to_line(HOLD)[:-20],
    ],
)
def test_a_line_that_is_no_message_is_refused(line):
    with pytest.raises(ReplyMalformed):
        from_line(line)


@given(st.binary(max_size=200))
def test_arbitrary_bytes_give_only_our_own_error(line):
    with pytest.raises(ReplyMalformed):
        from_line(line)
