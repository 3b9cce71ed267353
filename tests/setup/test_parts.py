"""A parts list is read as any spreadsheet writes it; each problem names its cell."""

from datetime import UTC, datetime
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ohmward.errors import Problems
from ohmward.setup.bench import Bench, BenchInstrument, Fixture, Position
from ohmward.setup.parts import COLUMNS, load_parts
from ohmward.terms.kind import Kind, Polarity
from ohmward.terms.part import Part
from ohmward.terms.role import Role


def bench(loading: str = "scanner", positions: int = 3) -> Bench:
    return Bench.model_validate(
        {
            "format": 1,
            "name": "bench",
            "instrument": {
                "relays": BenchInstrument(
                    role=Role.SCANNER, driver="d", address="TCPIP::h::1::SOCKET"
                )
            },
            "fixture": Fixture.model_validate({"loading": loading}),
            "position": [
                Position(name=str(number), meter_channels=(f"10{number}",))
                for number in range(1, positions + 1)
            ],
        }
    )


def read(
    tmp_path: Path, content: str | bytes, on: Bench | None = None
) -> tuple[tuple[Part, ...], dict[str, str]]:
    path = tmp_path / "lot.csv"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    problems = Problems()
    parts = load_parts(path, on, problems)
    return parts, {problem.key: problem.id for problem in problems}


FULL = (
    "part_id,position,kind,nominal,tolerance,rated_voltage,rated_current,rated_power,"
    "reverse_voltage,marking,dielectric,polarity,lot,last_energised,safety_class\n"
)


def test_a_full_row(tmp_path: Path) -> None:
    row = 'C1,1,capacitor,47 uF,-20/+80 %,"450 V DC",,,1 V,47µF 450V,aluminium,polar,2026-A,'
    parts, problems = read(tmp_path, FULL + row + "2025-06-30,\n", bench())
    assert not problems
    assert parts == (
        Part(
            part_id="C1",
            position="1",
            kind=Kind.CAPACITOR,
            nominal=47e-6,
            tolerance_low=-0.2,
            tolerance_high=0.8,
            rated_v=450.0,
            marking="47µF 450V",
            dielectric="aluminium",
            polarity=Polarity.POLAR,
            reverse_v=1.0,
            lot="2026-A",
            last_energised=datetime(2025, 6, 30, tzinfo=UTC),
            row=2,
        ),
    )


def test_ac_and_dc_ratings_are_kept_apart(tmp_path: Path) -> None:
    text = (
        "part_id,position,kind,nominal,rated_voltage,safety_class\n"
        "C1,1,capacitor,100 nF,275 V AC,X2\n"
        "C2,2,capacitor,100 nF,630 V DC / 250 V AC,\n"
        "C3,3,capacitor,100 nF,63 V,\n"
    )
    parts, problems = read(tmp_path, text, bench())
    assert not problems
    assert [(part.rated_v, part.rated_ac_v) for part in parts] == [
        (None, 275.0),
        (630.0, 250.0),
        (63.0, None),
    ]
    assert parts[0].safety_class == "X2"


def test_a_spreadsheet_of_a_country_with_decimal_commas(tmp_path: Path) -> None:
    text = (
        "Part ID;Position;Kind;Nominal;Tolerance;Rated Voltage\r\n"
        "C1;1;Capacitor;4,7 µF;±2,5 %;6,3 V\r\n"
        ";;;;;\r\n"
        '"L;1";2;inductor;1,5 mH;;\r\n'
    )
    for encoding in ("utf-8", "utf-8-sig", "cp1252", "utf-16"):
        parts, problems = read(tmp_path, text.encode(encoding), bench())
        assert not problems, encoding
        assert [part.nominal for part in parts] == [4.7e-6, 1.5e-3]
        assert [part.part_id for part in parts] == ["C1", "L;1"]
        assert parts[0].tolerance_high == pytest.approx(0.025)
        assert parts[0].rated_v == 6.3
        assert [part.row for part in parts] == [2, 4]


def test_tabs_and_a_delimiter_hint(tmp_path: Path) -> None:
    text = "part_id\tposition\tkind\tnominal\nR1\t1\tresistor\t4k7\n"
    assert read(tmp_path, text)[0][0].nominal == 4700.0
    assert read(tmp_path, "sep=;\n" + text.replace("\t", ";"))[0][0].nominal == 4700.0


def test_a_number_that_may_be_grouped_or_decimal_names_its_cell(tmp_path: Path) -> None:
    points = 'part_id,position,kind,nominal\nC1,1,capacitor,"4,700 pF"\n'
    assert read(tmp_path, points)[1] == {"row 2, nominal": "wrong-unit-or-value"}
    commas = "part_id;position;kind;nominal\nC1;1;capacitor;4.700 pF\n"
    assert read(tmp_path, commas)[1] == {"row 2, nominal": "wrong-unit-or-value"}


def test_semicolons_with_decimal_points_make_commas_doubtful(tmp_path: Path) -> None:
    text = "part_id;position;kind;nominal\nC1;1;capacitor;4.7 uF\nC2;2;capacitor;1,000 pF\n"
    assert read(tmp_path, text)[1] == {"row 3, nominal": "wrong-unit-or-value"}


def test_the_marking_gives_what_the_list_leaves_out(tmp_path: Path) -> None:
    text = "part_id,position,kind,marking\nC1,1,capacitor,2A104K\nR1,2,resistor,4K7J\n"
    parts, problems = read(tmp_path, text)
    assert not problems
    assert [(part.nominal, part.tolerance_high) for part in parts] == [(1e-7, 0.1), (4700.0, 0.05)]
    assert parts[0].rated_v is None  # a voltage code is no statement of the list


def test_an_ambiguous_marking_is_asked_back_unless_the_list_answers(tmp_path: Path) -> None:
    head = "part_id,position,kind,nominal,marking\n"
    assert read(tmp_path, head + "R1,1,resistor,,104K\n")[1] == {
        "row 2, marking": "ambiguous-marking"
    }
    parts, problems = read(tmp_path, head + "R1,1,resistor,100 kohm,104K\n")
    assert not problems
    assert (parts[0].nominal, parts[0].tolerance_low) == (100e3, -0.1)
    parts, problems = read(tmp_path, head + "R1,1,resistor,104 kohm,104K\n")
    assert not problems
    assert parts[0].tolerance_low is None


def test_a_marking_that_is_no_value_is_kept_as_it_is(tmp_path: Path) -> None:
    head = "part_id,position,kind,nominal,marking\n"
    parts, problems = read(tmp_path, head + "C1,1,capacitor,100 nF,=SUM(A1)\n")
    assert not problems
    assert parts[0].marking == "=SUM(A1)"
    assert read(tmp_path, head + "C1,1,capacitor,,MKP 10\n")[1] == {
        "row 2, marking": "unreadable-marking"
    }
    assert read(tmp_path, head + "C1,1,capacitor,,.1 MFD\n")[1] == {
        "row 2, marking": "ambiguous-marking"
    }


def test_contradictions_between_list_and_marking(tmp_path: Path) -> None:
    head = "part_id,position,kind,nominal,rated_voltage,marking\n"
    rows = "C1,1,capacitor,10 nF,,104K\nC2,2,capacitor,100 nF,400 V,2A104K\n"
    assert read(tmp_path, head + rows)[1] == {
        "row 2, nominal": "nominal-contradicts-marking",
        "row 3, rated_voltage": "rating-contradicts-marking",
    }


@pytest.mark.parametrize(
    ("dielectric", "polarity", "expected"),
    [
        ("aluminium", "", Polarity.POLAR),
        ("solid Tantalum", "", Polarity.POLAR),
        ("bipolar electrolytic", "", Polarity.NONPOLAR),
        ("aluminium", "nonpolar", Polarity.NONPOLAR),
        ("PP", "", Polarity.NONPOLAR),
        ("PP", "polar", Polarity.POLAR),
    ],
)
def test_a_dielectric_that_is_polar_by_nature_is_polar_unless_the_list_says_otherwise(
    tmp_path: Path, dielectric: str, polarity: str, expected: Polarity
) -> None:
    text = "part_id,position,kind,nominal,dielectric,polarity\n"
    parts, _ = read(tmp_path, f"{text}C1,1,capacitor,1 uF,{dielectric},{polarity}\n")
    assert parts[0].polarity is expected


def test_every_problem_at_once_by_its_cell(tmp_path: Path) -> None:
    text = FULL + (
        "C1,9,capacitor,100 nF,,,,,,,,,,,\n"
        "C1,1,capacitr,100 nF,,,,,,,,,,,\n"
        ",1,resistor,470,5,,,,,,,,,,\n"
        "C4,2,capacitor,10 MFD,,450,0 A,-1 W,,,,sideways,,31.01.2026,Z9\n"
        "C5,,capacitor,,,,,,,,,,,,\n"
        "C6,3,capacitor,100 nF,,63 V,,,100 V,,,,,,,surplus\n"
        "C7,3,capacitor,100 nF,,275 V,,,,,,,,,X2\n"
        "L8,2,inductor,1 mH,,,,,,,,polar,,,\n"
    )
    assert read(tmp_path, text, bench())[1] == {
        "row 2, position": "unknown-position",
        "row 3, kind": "unknown-kind",
        "row 3, part_id": "duplicate-part-id",
        "row 4, part_id": "wrong-part-id",
        "row 4, nominal": "wrong-unit-or-value",
        "row 4, position": "position-taken",
        "row 5, nominal": "wrong-unit-or-value",
        "row 5, rated_voltage": "wrong-unit-or-value",
        "row 5, rated_current": "out-of-range",
        "row 5, rated_power": "out-of-range",
        "row 5, polarity": "unknown-word",
        "row 5, last_energised": "wrong-date",
        "row 5, safety_class": "wrong-value",
        "row 6, position": "missing-cell",
        "row 6, nominal": "missing-cell",
        "row 7": "too-many-cells",
        "row 7, reverse_voltage": "out-of-range",
        "row 8, rated_voltage": "rating-unstated",
        "row 8, position": "position-taken",
        "row 9, polarity": "wrong-value",
        "row 9, position": "position-taken",
    }


def test_parts_loaded_by_hand_may_share_a_position(tmp_path: Path) -> None:
    text = "part_id,position,kind,nominal\nC1,1,capacitor,1 nF\nC2,1,capacitor,1 nF\n"
    parts, problems = read(tmp_path, text, bench("by hand"))
    assert not problems
    assert len(parts) == 2


def test_the_only_position_need_not_be_named(tmp_path: Path) -> None:
    text = "part_id,kind,nominal\nC1,capacitor,1 nF\nC2,capacitor,1 nF\n"
    parts, problems = read(tmp_path, text, bench("by hand", positions=1))
    assert not problems
    assert [part.position for part in parts] == ["1", "1"]


def test_columns_of_ones_own_are_left_alone_but_misspelt_ones_are_told(tmp_path: Path) -> None:
    text = "part_id,position,kind,nominal,drawer,Rated_Volage\nC1,1,capacitor,1 nF,7,\n"
    assert read(tmp_path, text)[1] == {"row 1": "unknown-column"}
    text = "part_id,position,kind,nominal,drawer,supplier\nC1,1,capacitor,1 nF,7,x\n"
    assert read(tmp_path, text)[1] == {}


@pytest.mark.parametrize(
    ("content", "problem"),
    [
        (b"", ("-", "empty-list")),
        (b"\n\n", ("-", "empty-list")),
        (b"part_id,kind\n", ("-", "empty-list")),
        (b"part_id,kind\n,,\n", ("-", "empty-list")),
        (b"part_id,nominal\nC1,1 nF\n", ("row 1", "missing-column")),
        (b'part_id,kind\n"C1,capacitor\n', ("line 2", "csv-syntax")),
        (b"part_id,part_id,kind\nC1,C1,resistor\n", ("row 1, part_id", "duplicate-column")),
        (b"\x00\x01\x02", ("-", "not-text")),
        (b"\xff\xfe\x00", ("-", "not-text")),
    ],
)
def test_a_file_that_is_no_list(tmp_path: Path, content: bytes, problem: tuple[str, str]) -> None:
    _, problems = read(tmp_path, content)
    assert problem in problems.items()


def test_a_missing_file_is_a_problem(tmp_path: Path) -> None:
    problems = Problems()
    assert load_parts(tmp_path / "none.csv", None, problems) == ()
    assert [problem.id for problem in problems] == ["file-missing"]


cells = st.sampled_from(
    [
        "",
        "C1",
        "1",
        "capacitor",
        "100 nF",
        "4,7 uF",
        "104K",
        "x",
        "=1",
        '"',
        "±5 %",
        "63 V",
        "\ud7ff",
    ]
)


@given(st.lists(st.lists(cells, max_size=17), max_size=5), st.sampled_from(",;\t"))
def test_any_rows_are_parts_or_problems(
    tmp_path_factory: pytest.TempPathFactory, rows: list[list[str]], delimiter: str
) -> None:
    folder = tmp_path_factory.mktemp("lot")
    lines = [delimiter.join(COLUMNS), *(delimiter.join(row) for row in rows)]
    parts, problems = read(folder, "\n".join(lines), bench())
    assert problems or len(parts) == sum(any(row) for row in rows)


@given(st.binary(max_size=200))
def test_any_bytes_are_parts_or_problems(
    tmp_path_factory: pytest.TempPathFactory, content: bytes
) -> None:
    parts, problems = read(tmp_path_factory.mktemp("lot"), content)
    assert parts or problems
