"""Transcripts: bounded, written and read again, put through a driver without a link."""

from pathlib import Path

import pytest
import trio
from tests.contracts.roles.worlds import Place, World

from ohmward.errors import LinkTimeout, Problems
from ohmward.instruments.transcript import (
    Exchange,
    TappedWire,
    Transcript,
    Transcripts,
    read_transcript,
    replayed,
)
from ohmward.setup.driver import load_driver
from ohmward.sim.faults import Fault


def exchange(sent: bytes, received: bytes, error: str = "") -> Exchange:
    return Exchange(at_s=0.0, sent=sent, received=received, took_s=0.0, error=error)


def test_it_keeps_the_last_and_no_more() -> None:
    transcript = Transcript(most=3)
    transcript.exchanges.extend(exchange(b"%d" % n, b"") for n in range(10))
    assert [one.sent for one in transcript.exchanges] == [b"7", b"8", b"9"]
    assert transcript.text().count("\n") == 3


def test_it_is_read_as_it_was_written(tmp_path: Path) -> None:
    kept = Transcripts()
    given = [
        exchange(b"READ?", b'\x00\xff\n\\ "q" +1', ""),
        exchange(b"", b"", "no whole reply in time"),
    ]
    kept.of("meter").exchanges.extend(given)
    kept.write(tmp_path / "transcript")
    assert read_transcript(tmp_path / "transcript" / "meter.jsonl") == given
    (tmp_path / "bad").write_text(kept.of("meter").text() + '{"at_s": 1}\n', "utf-8")
    with pytest.raises(ValueError, match="line 3"):
        read_transcript(tmp_path / "bad")


def test_every_exchange_of_a_link_is_kept_with_what_became_of_it() -> None:
    async def work(place: Place) -> list[Exchange]:
        transcript = Transcript()
        place.talker.link = TappedWire(place.talker.link, transcript)
        await place.talker.identify()
        await place.talker.ask("voltage")
        place.layer.inject(Fault(kind="silent"))
        with pytest.raises(LinkTimeout):
            await place.talker.ask("voltage")
        with trio.move_on_after(0.001):
            await place.talker.ask("voltage")
        return list(transcript.exchanges)

    kept = World("scpi-multimeter", "socket", served=False).run(work)
    assert kept[0].received == b"GENERIC,MULTIMETER,SIM-1,1.0"
    asked = [one for one in kept if one.sent == b"MEAS:VOLT?"]
    assert [bool(one.received) for one in asked] == [True, False, False]
    assert asked[0].took_s == pytest.approx(0.02)  # the manual's medium aperture
    assert "in time" in asked[1].error
    assert asked[1].took_s == pytest.approx(3.0)  # the driver's timeout
    assert asked[2].error == "cut short"


def test_what_was_kept_goes_through_the_driver_again() -> None:
    driver = load_driver("scpi-multimeter", Path(), Problems())
    assert driver is not None
    found = replayed(
        [
            exchange(b"MEAS:VOLT?", b"+1.250000E+01"),
            exchange(b"MEAS:VOLT?", b"+1.25000E+01"),
            exchange(b"MEAS:VOLT?", b"+9.900000E+37"),
            exchange(b"VOLT:RANG:AUTO?", b"1"),
            exchange(b"*CLS", b""),
            exchange(b"MEAS:VOLT?", b"", "no whole reply in time"),
        ],
        driver,
    )
    assert [(one.entry, one.understood) for one in found] == [
        ("reading.voltage", True),
        ("reading.voltage", False),
        ("reading.voltage", True),
        ("setting.range_automatic", True),
        ("", True),
        ("reading.voltage", True),
    ]
    assert found[0].meaning == "voltage = 12.5 (ok)"
    assert "12 characters" in found[1].meaning
    assert "overload" in found[2].meaning
    assert found[5].meaning == "no whole reply in time"
