"""Across all faults that a link can detect, no reply of one query is returned for another.

Every query has a number, and the scripted instrument answers with that number in a reading:
whatever a query returns must be its own reply, whole. What the link cannot detect (see its
module) is left out: a whole line that arrives unasked between a query and its reply.
"""

import random
from collections.abc import Callable

import pytest
import trio
from hypothesis import given, settings
from hypothesis import strategies as st

from ohmward.errors import LinkError

IDENTITY = b"GENERIC,SCRIPTED,17,1.0\n"
HANG_UP = b"<hang up>"
TIMEOUT_S = 0.25

Piece = tuple[float, bytes]


def reading(number: int) -> bytes:
    """A reading whose second half is a plausible number too."""
    return b"+1.%06dE-%02d\n" % (number, number % 90 + 10)


FAULTS: dict[str, Callable[[int, float], list[Piece]]] = {
    "none": lambda n, _: [(0.0, reading(n))],
    "slow": lambda n, x: [(0.8 * TIMEOUT_S * x, reading(n))],
    "late": lambda n, x: [(TIMEOUT_S + 0.01 + x, reading(n))],
    "split in time": lambda n, x: [(0.0, reading(n)[:6]), (0.8 * TIMEOUT_S * x, reading(n)[6:])],
    "split over the timeout": lambda n, x: [
        (0.0, reading(n)[:9]),
        (TIMEOUT_S + 0.01 + x, reading(n)[9:]),
    ],
    "silent": lambda _n, _x: [],
    "unterminated": lambda n, _: [(0.0, reading(n)[:-1])],
    "twice": lambda n, _: [(0.0, reading(n) * 2)],
    "and something after": lambda n, _: [(0.0, reading(n)), (0.001, b"+9.9E37\n")],
    "one letter after": lambda n, _: [(0.0, reading(n)), (0.001, b"1")],
    "hangs up": lambda _n, _x: [(0.0, HANG_UP)],
    "half, then hangs up": lambda n, x: [(0.0, reading(n)[:9]), (x / 10, HANG_UP)],
    "reply, then hangs up": lambda n, x: [(0.0, reading(n)), (x / 10, HANG_UP)],
    "trickles": lambda n, x: [(x / 10 * k, reading(n)[k : k + 1]) for k in range(len(reading(n)))],
    "endless": lambda _n, _x: [(0.0, b"1" * 3000)],
}

IDENTITY_FAULTS: dict[str, Callable[[float], list[Piece]]] = {
    "none": lambda _: [(0.0, IDENTITY)],
    "late": lambda x: [(TIMEOUT_S + 0.01 + x, IDENTITY)],
    "silent": lambda _: [],
    "split": lambda x: [(0.0, IDENTITY[:9]), (TIMEOUT_S + 0.01 + x, IDENTITY[9:])],
    "hangs up": lambda _: [(0.0, HANG_UP)],
}

exchanges = st.lists(
    st.tuples(
        st.sampled_from(sorted(FAULTS)),
        st.sampled_from(["none", "none", "none", *sorted(IDENTITY_FAULTS)]),
        st.floats(0.0, 1.0),
        st.floats(0.02, 1.0),  # what comes after a reply comes before the next query
    ),
    min_size=1,
    max_size=25,
)


async def every_reply_is_its_own(link, script, plan) -> int:
    """Go through the plan: (fault, identity's fault, x, pause after it in units of 0.1 s).

    Returns how many queries were answered.
    """
    current = {"fault": "none", "identity": "none", "x": 0.0}

    def answer(line: bytes) -> list[Piece]:
        if line == b"*IDN?":
            fault, current["identity"] = current["identity"], "none"
            return IDENTITY_FAULTS[fault](current["x"])
        return FAULTS[current["fault"]](int(line[1:-1]), current["x"])

    script.answer = answer
    answered = 0
    for number, (fault, identity, x, pause_s) in enumerate(plan, start=1):
        current.update(fault=fault, identity=identity, x=x)
        try:
            reply = await link.query(b"Q%d?" % number)
        except LinkError:
            continue
        finally:
            current["fault"] = "none"
            await trio.sleep(pause_s / 10)
        assert reply + b"\n" == reading(number), f"{fault}: the reply of another query"
        answered += 1
    return answered


class TestInVirtualTime:
    @pytest.mark.slow
    @settings(max_examples=150, deadline=None)
    @given(plan=exchanges)
    def test_any_order_of_faults(self, worlds, plan):
        with worlds() as world:

            async def talk(link):
                await every_reply_is_its_own(link, world.script, plan)

            world.run(talk, max_reply_bytes=1000, reopen_budget_s=1e4)

    @pytest.mark.slow
    def test_a_long_random_mixture_still_delivers_what_was_not_faulted(self, worlds):
        """At least 99 % of unfaulted queries are answered, though nearly all follow a fault."""
        draw = random.Random(20)
        faults = sorted(FAULTS)
        plan = []
        for _ in range(1500):
            plan.append((draw.choice(faults), "none", draw.random(), draw.uniform(0.02, 1.0)))
            plan += [("none", "none", 0.0, 0.0)] * 2
        faulted = sum(fault != "none" for fault, *_ in plan)

        with worlds() as world:

            async def talk(link):
                with trio.fail_after(1e5):
                    answered = await every_reply_is_its_own(link, world.script, plan)
                assert answered >= 0.99 * (len(plan) - faulted)

            world.enter(lambda _clock: _opened(world, talk))


async def _opened(world, talk) -> None:
    link = world.link(max_reply_bytes=1000)
    await link.open()
    await talk(link)
    await link.aclose()


@pytest.mark.processes
@pytest.mark.slow
@pytest.mark.parametrize("kind", ["tcp", "hislip"])
def test_the_same_over_real_links(kind, request):
    world = request.getfixturevalue(kind)
    draw = random.Random(21)
    plan = []
    for fault in sorted(FAULTS) * 2:
        pause = 0.5 if fault.endswith("after") else 0.0
        plan.append((fault, draw.choice(["none", "none", "late"]), draw.random() / 4, pause))
        plan += [("none", "none", 0.0, 0.0)] * 4

    async def talk(link):
        assert await every_reply_is_its_own(link, world.script, plan) >= 4 * len(FAULTS)

    world.run(talk, max_reply_bytes=1000, drain_s=0.02)
