"""What a person reads of a brief that charges parts: dangers, sources, who stays, what is seen."""

from io import StringIO
from pathlib import Path

from rich.console import Console
from tests.sequence.given import CAPACITORS
from tests.sequence.test_direct import REFORM, brief_of, film, leakage, path_with, stage, stored

from ohmward.output.screen import show_brief
from ohmward.sequence.brief import Brief


def shown(brief: Brief) -> str:
    console = Console(file=StringIO(), width=160)
    show_brief(console, brief)
    assert isinstance(console.file, StringIO)
    return console.file.getvalue()


def test_dangers_come_with_their_source_and_what_is_from_memory(tmp_path: Path) -> None:
    """47 uF + 10 % at 450 V: 5.23 J and 23.3 mC (calculated); above 45 uC by IEC 61010-1."""
    text = shown(brief_of(tmp_path, CAPACITORS + REFORM + leakage(), stored()))
    assert "5.23 J" in text
    assert "23.3 mC" in text
    assert "hazardous charge up to 15 kV: above 45 µC, IEC 61010-1:2010, 6.3, from memory" in text
    assert "reflex" in text
    assert "Needs --authorised-by NAME" in text
    assert "A person stays: the bench lacks an enclosure interlock" in text
    assert "225 V to 450 V" in text


def test_a_bench_that_cannot_see_says_so(tmp_path: Path) -> None:
    """With a divider of 10 kohm, 40 mA flow at 400 V: above every range of the meter."""
    on = path_with(divider_ohm=1e4, insulation_ohm=None)
    text = shown(brief_of(tmp_path, CAPACITORS + leakage(), film(), on=on))
    assert "no range takes what flows" in text
    assert "Not in it, because nobody states it: the fixture's insulation." in text


def test_a_sweep_is_shown_without_dangers(tmp_path: Path) -> None:
    sweep = stage("sweep", frequency='"1 kHz"', level='"1 V"')
    text = shown(brief_of(tmp_path, CAPACITORS + sweep, film()))
    assert "authorised-by" not in text
    assert "danger" not in text
    assert "1 kHz" in text
