"""What every link does, whichever way it waits: one suite, run over TCP and in virtual time."""

import pytest
import trio

from ohmward.errors import LinkError, LinkLost, LinkTimeout, ReplyMalformed, WrongIdentity
from ohmward.links.link import Link

IDENTITY = b"GENERIC,SCRIPTED,17,1.0"
HANG_UP = b"<hang up>"
LATE_S = 0.4
TIMEOUT_S = 0.25


async def asks_rightly(link: Link, first: int = 100, count: int = 3) -> None:
    for number in range(first, first + count):
        assert await link.query(b"Q%d?" % number) == b"%d" % number
    assert not link.dirty


class TestInOrder:
    def test_opening_asks_the_identity_and_nothing_else(self, world):
        async def main(_clock):
            link = world.link()
            assert await link.open() == IDENTITY
            await link.aclose()

        world.enter(main)
        assert world.script.heard == [b"*IDN?"]

    def test_each_reply_belongs_to_its_query(self, world):
        async def talk(link):
            await asks_rightly(link, count=50)

        world.run(talk)
        assert world.script.sessions == 1

    def test_a_command_is_sent_once_and_ends_as_agreed(self, world):
        async def talk(link):
            await link.write(b"FREQ 1000")
            await asks_rightly(link, count=1)

        world.run(talk)
        assert world.script.heard == [b"*IDN?", b"FREQ 1000", b"Q100?"]

    def test_a_reply_in_pieces_is_one_reply(self, world):
        world.script.once(b"Q1?", [(0.02, b"+1.234567E"), (0.06, b"-12\n")])

        async def talk(link):
            assert await link.query(b"Q1?") == b"+1.234567E-12"

        world.run(talk)

    def test_a_longer_timeout_waits_longer(self, world):
        world.script.once(b"Q1?", [(LATE_S, b"1\n")])

        async def talk(link):
            assert await link.query(b"Q1?", timeout_s=2.0) == b"1"
            await asks_rightly(link)

        world.run(talk)

    def test_a_message_that_comes_by_itself_can_be_received(self, world):
        world.script.once(b"INIT", [(0.0, b"+1.0\n"), (0.05, b"+2.0\n")])

        async def talk(link):
            await link.write(b"INIT")
            assert await link.receive() == b"+1.0"
            assert await link.receive() == b"+2.0"
            await asks_rightly(link)

        world.run(talk)

    def test_tasks_take_turns(self, world):
        async def talk(link):
            async with trio.open_nursery() as nursery:
                for first in (100, 200, 300, 400):
                    nursery.start_soon(asks_rightly, link, first, 10)

        world.run(talk)

    def test_the_gap_between_commands_is_kept(self, world):
        async def talk(link):
            await link.query(b"Q1?")
            ended_s = trio.current_time()
            await link.query(b"Q2?")
            assert trio.current_time() - ended_s >= 0.05

        world.run(talk, gap_s=0.05)

    def test_the_opening_delay_is_waited(self, world):
        async def main(_clock):
            started_s = trio.current_time()
            link = world.link(opening_delay_s=0.1)
            await link.open()
            assert trio.current_time() - started_s >= 0.1
            await link.aclose()

        world.enter(main)


class TestTimeout:
    def test_silence_is_a_timeout_at_its_time(self, world):
        world.script.once(b"Q1?", [])

        async def talk(link):
            started_s = trio.current_time()
            with pytest.raises(LinkTimeout):
                await link.query(b"Q1?")
            assert trio.current_time() - started_s >= 0.99 * TIMEOUT_S
            if world.virtual:
                assert trio.current_time() - started_s == pytest.approx(TIMEOUT_S)
            assert link.dirty
            await asks_rightly(link)

        world.run(talk)

    def test_trickling_bytes_do_not_extend_it(self, world):
        pieces = [(0.02 * n, b"1") for n in range(1, 100)]
        world.script.once(b"Q1?", pieces)

        async def talk(link):
            started_s = trio.current_time()
            with pytest.raises(LinkTimeout):
                await link.query(b"Q1?")
            assert trio.current_time() - started_s < 1.5  # the last byte comes at 1.98 s

        world.run(talk)

    @pytest.mark.parametrize("late_s", [0.27, 0.3, 0.4, 0.7])
    def test_a_late_reply_is_never_the_next_ones(self, world, late_s):
        world.script.once(b"Q1?", [(late_s, b"1\n")])

        async def talk(link):
            with pytest.raises(LinkTimeout):
                await link.query(b"Q1?")
            await asks_rightly(link, count=2)
            await trio.sleep(late_s)
            await asks_rightly(link, first=200)

        world.run(talk)

    def test_half_a_reply_is_never_a_reply(self, world):
        world.script.once(b"Q1?", [(0.05, b"+1.234567E"), (LATE_S, b"-12\n")])

        async def talk(link):
            with pytest.raises(LinkTimeout):
                await link.query(b"Q1?")
            await asks_rightly(link)

        world.run(talk)

    def test_it_proves_itself_by_its_identity_before_anything_else(self, world):
        world.script.once(b"Q1?", [])

        async def talk(link):
            with pytest.raises(LinkTimeout):
                await link.query(b"Q1?")
            await link.query(b"Q2?")

        world.run(talk)
        assert world.script.heard == [b"*IDN?", b"Q1?", b"*IDN?", b"Q2?"]

    def test_a_session_that_cannot_prove_itself_is_replaced(self, world):
        async def talk(link):
            link.distrust("a letter in a number")
            world.script.once(b"*IDN?", [])
            await asks_rightly(link)

        world.run(talk)
        assert world.script.sessions == 2

    def test_a_late_identity_is_not_the_proof_of_a_later_query(self, world):
        async def talk(link):
            world.script.once(b"*IDN?", [(LATE_S, IDENTITY + b"\n")])
            with pytest.raises(LinkTimeout):
                await link.query(b"*IDN?")
            await asks_rightly(link)

        world.run(talk)
        assert world.script.sessions == 2

    def test_a_free_running_link_may_wait_in_short_turns(self, world):
        world.script.banner = [(0.5, b"+1.0\n"), (0.6, b"+2.0\n")]

        async def talk(link):
            with pytest.raises(LinkTimeout):
                await link.receive(timeout_s=0.1)
            assert not link.dirty
            assert await link.receive(timeout_s=2.0) == b"+1.0"
            assert await link.receive(timeout_s=2.0) == b"+2.0"

        world.run(talk, free_running=True)


class TestWhatNobodyAskedFor:
    def test_a_banner_is_drained_at_opening(self, world):
        world.script.banner = [(0.0, b"ready\n"), (0.01, b"self test passed\n")]

        async def talk(link):
            await asks_rightly(link)

        world.run(talk)

    def test_an_instrument_that_never_stops_talking_cannot_be_opened(self, world):
        world.script.banner = [(0.01 * n, b"+1.0\n") for n in range(300)]

        async def main(_clock):
            link = world.link()
            with pytest.raises(ReplyMalformed, match="never stops talking"):
                await link.open()
            await link.aclose()

        world.enter(main)
        assert world.script.heard == []

    def test_bytes_that_wait_before_a_query_are_no_reply(self, world):
        world.script.once(b"FREQ 1", [(0.0, b"surprise\n")])

        async def talk(link):
            await link.write(b"FREQ 1")
            await trio.sleep(0.1)
            await asks_rightly(link)

        world.run(talk)
        assert world.script.heard[2] == b"*IDN?"

    def test_two_replies_to_one_query_are_none(self, world):
        world.script.once(b"Q1?", [(0.0, b"7\n1\n")])

        async def talk(link):
            with pytest.raises(ReplyMalformed, match="more than one"):
                await link.query(b"Q1?")
            await asks_rightly(link)

        world.run(talk)

    def test_a_reply_without_its_whole_termination_is_none(self, stream_world):
        world = stream_world
        world.script.answer = lambda line: (
            [(0.0, IDENTITY + b"\r\n")] if line == b"*IDN?" else [(0.0, b"1\n")]
        )

        async def talk(link):
            with pytest.raises(ReplyMalformed, match="ends in"):
                await link.query(b"Q1?")
            assert link.dirty

        world.run(talk, read_termination=b"\r\n")

    def test_a_reply_that_is_too_long_is_none(self, world):
        world.script.once(b"Q1?", [(0.0, b"1" * 5000 + b"\n")])

        async def talk(link):
            with pytest.raises(ReplyMalformed, match="at most 1000 bytes"):
                await link.query(b"Q1?")
            await asks_rightly(link)

        world.run(talk, max_reply_bytes=1000)

    def test_what_the_caller_distrusts_is_proven_before_more_is_sent(self, world):
        async def talk(link):
            await link.query(b"Q1?")
            link.distrust("a letter in a number")
            assert link.dirty
            assert link.distrusted_because == "a letter in a number"
            await asks_rightly(link, count=1)

        world.run(talk)
        assert world.script.heard == [b"*IDN?", b"Q1?", b"*IDN?", b"Q100?"]
        assert world.script.sessions == 1


class TestCancellation:
    def test_a_cancelled_query_leaves_nothing_for_the_next(self, world):
        world.script.once(b"Q1?", [(0.2, b"1\n")])

        async def talk(link):
            with trio.move_on_after(0.05) as scope:
                await link.query(b"Q1?", timeout_s=30.0)
            assert scope.cancelled_caught
            assert link.dirty
            await asks_rightly(link)

        world.run(talk)

    def test_a_query_cancelled_before_it_began_does_no_harm(self, world):
        async def talk(link):
            with trio.CancelScope() as scope:
                scope.cancel()
                await link.query(b"Q1?")
            await asks_rightly(link)

        world.run(talk)

    def test_a_cancelled_recovery_is_begun_again(self, world):
        world.script.once(b"Q1?", [])

        async def talk(link):
            with pytest.raises(LinkTimeout):
                await link.query(b"Q1?")
            world.script.once(b"*IDN?", [(0.2, IDENTITY + b"\n")])
            with trio.move_on_after(0.1) as scope:
                await link.query(b"Q2?")
            assert scope.cancelled_caught
            await asks_rightly(link)

        world.run(talk)

    def test_closing_works_while_everything_is_cancelled(self, world):
        async def main(_clock):
            link = world.link()
            await link.open()
            with trio.CancelScope() as scope:
                scope.cancel()
                await link.aclose()
            with pytest.raises(LinkLost, match="has been closed"):
                await link.query(b"Q1?")

        world.enter(main)
        assert world.script.heard == [b"*IDN?"]


class TestLoss:
    @pytest.mark.parametrize("said", [b"", b"+1.23"])
    def test_a_peer_that_closes_is_noticed_before_the_timeout(self, world, said):
        world.script.once(b"Q1?", [(0.0, said), (0.02, HANG_UP)])

        async def talk(link):
            with pytest.raises(LinkLost):
                await link.query(b"Q1?", timeout_s=50.0)
            await asks_rightly(link)

        world.run(talk)
        assert world.script.sessions == 2

    def test_a_peer_that_closed_between_two_queries_is_met_again(self, world):
        world.script.once(b"BYE", [(0.0, HANG_UP)])

        async def talk(link):
            await link.write(b"BYE")
            await trio.sleep(0.1)
            if world.virtual:  # what a library in the process does not say before it is used
                link.distrust("the peer may have left")
            await asks_rightly(link)

        world.run(talk)
        assert world.script.sessions == 2

    def test_it_is_opened_again_and_again_within_the_budget(self, world):
        world.script.once(b"Q1?", [(0.0, HANG_UP)])

        async def talk(link):
            with pytest.raises(LinkLost):
                await link.query(b"Q1?")
            world.script.refused = 3
            started_s = trio.current_time()
            await asks_rightly(link)
            assert trio.current_time() - started_s >= 0.1 + 0.2 + 0.4

        world.run(talk)

    def test_beyond_the_budget_it_is_given_up_at_once_until_asked(self, world):
        world.script.once(b"Q1?", [(0.0, HANG_UP)])

        async def talk(link):
            with pytest.raises(LinkLost):
                await link.query(b"Q1?")
            world.script.refused = 1000
            with pytest.raises(LinkError) as first:
                await link.query(b"Q2?")
            assert first.value.exit_code == 4
            left = world.script.refused
            with pytest.raises(LinkError) as second:
                await link.query(b"Q3?")
            assert world.script.refused == left
            assert str(second.value) == str(first.value)
            world.script.refused = 0
            await link.recover()
            await asks_rightly(link)

        world.run(talk, reopen_budget_s=0.5)

    def test_an_address_where_nothing_answers_is_told_at_opening(self, world):
        world.script.refused = 1000

        async def main(_clock):
            link = world.link()
            with pytest.raises(LinkError, match=r"127\.0\.0\.1"):
                await link.open()
            await link.aclose()

        world.enter(main)
        assert world.script.refused == 999

    def test_closed_sessions_are_forgotten(self, world):
        async def talk(link):
            library = world.manager.visalib
            registries = (
                library.sessions,
                library._last_status_in_session,
                library._ignore_warning_in_session,
                library.handlers,
            )
            await link.query(b"Q1?")
            sizes = [len(registry) for registry in registries]
            for number in range(5):
                world.script.once(b"Q%d?" % number, [(0.0, HANG_UP)])
                with pytest.raises(LinkLost):
                    await link.query(b"Q%d?" % number)
                await asks_rightly(link)
            assert [len(registry) for registry in registries] == sizes

        world.run(talk)


class TestIdentity:
    def test_another_instrument_is_not_opened(self, world):
        world.script.answer = lambda _line: [(0.0, b"GENERIC,OTHER,1,1.0\n")]

        async def main(_clock):
            link = world.link()
            with pytest.raises(WrongIdentity, match="OTHER"):
                await link.open()
            for _ in range(2):
                with pytest.raises(WrongIdentity, match="OTHER"):
                    await link.query(b"VOLT 1000?")
            await link.aclose()

        world.enter(main)
        assert world.script.heard == [b"*IDN?"]

    @pytest.mark.parametrize("serial", [b"18", b"170", b"1"])
    def test_another_serial_number_after_a_reconnection_gets_no_command(self, world, serial):
        world.script.once(b"Q1?", [(0.0, HANG_UP)])

        async def talk(link):
            with pytest.raises(LinkLost):
                await link.query(b"Q1?")
            world.script.answer = lambda _line: [(0.0, b"GENERIC,SCRIPTED,%s,1.0\n" % serial)]
            for _ in range(3):
                with pytest.raises(WrongIdentity, match="again"):
                    await link.query(b"VOLT 1000?")
            with pytest.raises(WrongIdentity, match="again"):
                await link.recover()

        world.run(talk)
        # a second look, in case the first was garbled on its way, and then no more
        assert world.script.heard == [b"*IDN?", b"Q1?", b"*IDN?", b"*IDN?"]

    def test_one_identity_that_is_garbled_on_its_way_does_not_end_the_link(self, world):
        world.script.once(b"Q1?", [(0.0, HANG_UP)])

        async def talk(link):
            with pytest.raises(LinkLost):
                await link.query(b"Q1?")
            world.script.once(b"*IDN?", [(0.0, b"GENERIC,SCR#PTED,17,1.0\n")])
            assert await link.query(b"Q2?") == b"2"

        world.run(talk)
        assert world.script.heard == [b"*IDN?", b"Q1?", b"*IDN?", b"*IDN?", b"Q2?"]

    def test_a_link_that_never_was_open_is_told(self, world):
        async def main(_clock):
            with pytest.raises(LinkLost, match="not open"):
                await world.link().query(b"Q1?")

        world.enter(main)

    def test_a_stream_without_termination_takes_no_query(self, stream_world):
        world = stream_world

        async def main(_clock):
            link = world.link(read_termination=b"", free_running=True)
            link._hello = type(link._hello)(query=b"", check=lambda reply: None)
            await link.open()
            with pytest.raises(LinkError, match="read termination"):
                await link.query(b"Q1?")
            await link.aclose()

        world.enter(main)
        assert world.script.heard == []
