"""The brief's hash: blind to how files look, awake to what is done."""

import json
from dataclasses import replace
from pathlib import Path

import pytest
from tests.sequence.given import CAPACITORS, DRIVERS, bench, capacitor, make

TEXT = (
    CAPACITORS
    + """
[[stage]]
kind = "sweep"
name = "sweep"
frequency = ["1 kHz", "10 kHz"]
level = "1 V"
dwell = "100 ms"
[[limit]]
stage = "sweep"
quantity = "capacitance_f"
at = { frequency = "1 kHz" }
min = "-10 %"
source = "test"
"""
)

SAME = {
    "comment": TEXT + "\n# a remark\n",
    "spaces": TEXT.replace(" = ", "=").replace("\n", "\n\n"),
    "units": TEXT.replace('"10 kHz"', '"10000 Hz"').replace('"100 ms"', '"0.1 s"'),
    "one for a list of one": TEXT.replace('level = "1 V"', 'level = ["1 V"]'),
    "keys in another order": TEXT.replace(
        'kind = "sweep"\nname = "sweep"\n', 'name = "sweep"\nkind = "sweep"\n'
    ),
    "a default spelled out": TEXT.replace('dwell = "100 ms"', 'dwell = "100 ms"\nrepeats = 1'),
    "purpose": TEXT.replace("to be tested", "to be tested again"),
}
OTHER = {
    "frequency": TEXT.replace('"10 kHz"', '"11 kHz"'),
    "order": TEXT.replace('["1 kHz", "10 kHz"]', '["10 kHz", "1 kHz"]'),
    "level": TEXT.replace('"1 V"', '"0.9 V"'),
    "bias": TEXT.replace('dwell = "100 ms"', 'dwell = "100 ms"\nbias = "1 V"'),
    "dwell": TEXT.replace('"100 ms"', '"101 ms"'),
    "repeats": TEXT.replace('dwell = "100 ms"', 'dwell = "100 ms"\nrepeats = 2'),
    "closure": TEXT.replace('dwell = "100 ms"', 'dwell = "100 ms"\nclosure = true'),
    "integration": TEXT.replace('dwell = "100 ms"', 'dwell = "100 ms"\nintegration = "long"'),
    "limit": TEXT.replace('"-10 %"', '"-11 %"'),
    "limit's source": TEXT.replace('source = "test"', 'source = "practice"'),
    "guard": TEXT.replace("\n[[stage]]", "\ndecision = { guard = 0.5 }\n[[stage]]"),
    "rating allowed": TEXT.replace("\n[[stage]]", '\nrating_allowed = "50 %"\n[[stage]]'),
}


@pytest.mark.parametrize("text", SAME.values(), ids=SAME)
def test_how_it_is_written_makes_no_difference(text: str, tmp_path: Path) -> None:
    assert text != TEXT
    assert make(tmp_path, text).good.hash == make(tmp_path, TEXT).good.hash


@pytest.mark.parametrize("text", OTHER.values(), ids=OTHER)
def test_what_is_done_makes_the_difference(text: str, tmp_path: Path) -> None:
    plain, other = make(tmp_path, TEXT).good, make(tmp_path, text).good
    assert other.hash != plain.hash
    assert other.hashes["sequence"] != plain.hashes["sequence"]
    assert {name for name in plain.hashes if other.hashes[name] != plain.hashes[name]} <= {
        "sequence",
        "limits",
    }


def test_parts_bench_and_drivers_are_in_it_each_by_itself(tmp_path: Path) -> None:
    plain = make(tmp_path, TEXT).good
    part = capacitor()
    for other in (replace(part, rated_v=63.0), replace(part, part_id="C9")):
        assert make(tmp_path, TEXT, other).good.hashes["parts"] != plain.hashes["parts"]
    assert make(tmp_path, TEXT, replace(part, row=5)).good.hash == plain.hash
    moved = make(tmp_path, TEXT, on=bench(bias_ceiling="10 V")).good
    changed = {name for name in plain.hashes if moved.hashes[name] != plain.hashes[name]}
    assert changed == {"bench"}
    assert moved.hash != plain.hash
    short = DRIVERS["meter"].model_copy(update={"summary": "another meter"})
    swapped = make(tmp_path, TEXT, drivers={**DRIVERS, "meter": short}).good
    assert swapped.hashes["drivers"] != plain.hashes["drivers"]


def test_the_brief_is_json(tmp_path: Path) -> None:
    brief = make(tmp_path, TEXT).good
    table = json.loads(json.dumps(brief.as_dict(), allow_nan=False))
    assert table["stages"][0]["kind"] == "sweep"
    assert table["stages"][0]["part"] == "C1"
    assert table["parts"][0]["nominal"] == 100e-9
    assert table["readings"] == brief.readings == 2
    assert table["hash"] == brief.hash
    assert len(brief.hash) == 64
