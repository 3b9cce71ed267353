"""What a person sees: names that look like markup, narrow terminals, no terminal."""

from io import StringIO
from pathlib import Path

import pytest
from rich.console import Console
from tests.cli.told import Ohmward

from ohmward.output.screen import show_decisions
from ohmward.output.verdicts import PartVerdict
from ohmward.terms.decision import Decision
from ohmward.terms.kind import Kind
from ohmward.terms.part import Part

ODD = ("[bold]C1", "[/]", "C[1]", "=1+1")


def shown(width: int, *, terminal: bool = False) -> str:
    verdicts = [
        PartVerdict(
            part=Part(part_id=name, position="1", kind=Kind.CAPACITOR, nominal=1e-6),
            decision=decision,
            reason="within all 4 limits [every one]",
        )
        for name, decision in zip(ODD, Decision, strict=False)
    ]
    file = StringIO()
    console = Console(file=file, width=width, force_terminal=terminal, no_color=True)
    show_decisions(console, verdicts)
    return file.getvalue()


@pytest.mark.parametrize("width", [20, 40, 71, 72, 80, 200])
def test_names_are_not_read_as_markup_at_any_width(width: int) -> None:
    text = " ".join(shown(width).split())
    for name in ODD:
        assert name in text
    if width >= 80:
        assert "[every one]" in text


def test_a_narrow_terminal_gets_lines_and_no_table() -> None:
    text = shown(40)
    assert "[bold]C1 accept\n  capacitor 1 µF in 1: within all 4 limits [every one]\n" in text
    assert "position" not in text


@pytest.mark.slow
def test_odd_names_go_through_a_whole_run(ohmward: Ohmward, tmp_path: Path) -> None:
    rows = [f"{name},{place},capacitor,1 uF,±10 %,63 V,PP" for place, name in enumerate(ODD, 1)]
    heading = "part_id,position,kind,nominal,tolerance,rated_voltage,dielectric"
    (tmp_path / "p.csv").write_text("\n".join([heading, *rows]), "utf-8")
    names = ("film-sweep", "--bench", "depot-bench", "--parts", "p.csv")
    assert all(name in ohmward("brief", *names).out for name in ODD)
    told = ohmward("dryrun", *names, "--out", "out")
    assert told.code == 0
    assert all(name in told.out for name in ODD)
    results = (tmp_path / "out" / "results.csv").read_text("utf-8")
    assert "'=1+1" in results  # a spreadsheet must not run it
