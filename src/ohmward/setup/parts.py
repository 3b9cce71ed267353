"""The parts list: a CSV that a spreadsheet can edit, read into parts, each problem by its cell."""

import re
from collections.abc import Callable
from datetime import UTC, date, datetime, time
from math import isclose
from pathlib import Path
from typing import TypeVar

from ohmward.errors import Problems
from ohmward.setup.bench import Bench, unknown_position
from ohmward.setup.spreadsheet import Row, Sheet, read_sheet
from ohmward.setup.toml import one_of, shown
from ohmward.terms.kind import Kind, Polarity
from ohmward.terms.part import Part
from ohmward.units.markings import Marking, MarkingAmbiguous, MarkingUnreadable, read_marking
from ohmward.units.rating import Rating, parse_rating
from ohmward.units.tolerance import parse_tolerance
from ohmward.units.values import UnitError, format_quantity, parse_quantity

NUMERIC = (
    "nominal",
    "tolerance",
    "rated_voltage",
    "working_voltage",
    "rated_current",
    "rated_power",
    "reverse_voltage",
)
COLUMNS = (
    "part_id",
    "position",
    "kind",
    *NUMERIC,
    "marking",
    "dielectric",
    "polarity",
    "lot",
    "last_energised",
    "last_heated",
    "safety_class",
)
SAME_VALUE_REL = 1e-3  # a marking has three digits: nearer than this and it says the same

# Dielectrics whose parts mind the sign of their voltage unless the list says otherwise.
_POLAR = ("aluminium", "aluminum", "electrolytic", "tantalum", "niobium", "polymer")
_NONPOLAR = ("bipolar", "nonpolar", "non-polar", "unpolarised", "unpolarized")
_SAFETY_CLASS = re.compile(r"[XY][1-4](?:[/ ]?[XY][1-4])?")

T = TypeVar("T")


def load_parts(path: Path, bench: Bench | None, problems: Problems) -> tuple[Part, ...]:
    """Read a parts list: the parts that are right, with every problem noted.

    With a bench, positions are checked against it: they exist, and hold one part each unless
    parts are loaded by hand.
    """
    sheet = read_sheet(path, COLUMNS, NUMERIC, problems)
    if sheet is None:
        return ()
    for name in ("part_id", "kind"):
        if name not in sheet.columns:
            problems.add(
                id="missing-column",
                file=path,
                key="row 1",
                expected=f"a column '{name}'",
                found="none",
            )
    if not {"part_id", "kind"} <= set(sheet.columns):
        return ()
    if not sheet.rows:
        problems.add(
            id="empty-list", file=path, key="-", expected="a row for each part", found="none"
        )
    readers = [_RowReader(row, sheet, path, bench, problems) for row in sheet.rows]
    parts = [part for reader in readers if (part := reader.read()) is not None]
    _check_ids(readers)
    _check_positions(readers, bench)
    return tuple(parts)


class _RowReader:
    """Reads one row's cells; every refusal is noted under its cell."""

    def __init__(
        self, row: Row, sheet: Sheet, path: Path, bench: Bench | None, problems: Problems
    ) -> None:
        self._cells = row.cells
        self._comma = sheet.decimal_comma
        self._path = path
        self._bench = bench
        self._problems = problems
        self.number = row.number
        self.part_id = self._cells["part_id"]
        self.position = self._cells["position"]

    def note(self, column: str, kind: str, expected: str, found: str) -> None:
        """Note a problem of this row's cell."""
        key = f"row {self.number}, {column}"
        self._problems.add(id=kind, file=self._path, key=key, expected=expected, found=found)

    def read(self) -> Part | None:
        """The part, or None where something in the row is wrong."""
        before = len(self._problems)
        self._check_part_id()
        self._check_position()
        kind = self._kind()
        if kind is None:
            return None
        marking = self._marking(kind)
        nominal = self._nominal(kind, marking)
        low, high = self._tolerance(kind, nominal, marking)
        rating = self._rating(marking)
        polarity = self._polarity(kind)
        reverse_v = self._reverse_v(rating)
        rated_a = self._positive("rated_current", "A")
        rated_w = self._positive("rated_power", "W")
        working_v = self._working_v(rating)
        energised, heated = self._date("last_energised"), self._date("last_heated")
        safety_class = self._safety_class(kind)
        if nominal is None or len(self._problems) > before:
            return None
        return Part(
            part_id=self.part_id,
            position=self.position,
            kind=kind,
            nominal=nominal,
            tolerance_low=low,
            tolerance_high=high,
            rated_v=rating.dc_v,
            rated_ac_v=rating.ac_v,
            rated_a=rated_a,
            rated_w=rated_w,
            marking=self._cells["marking"],
            dielectric=self._cells["dielectric"],
            polarity=polarity,
            reverse_v=reverse_v,
            lot=self._cells["lot"],
            last_energised=energised,
            last_heated=heated,
            working_v=working_v,
            safety_class=safety_class,
            row=self.number,
        )

    def _check_part_id(self) -> None:
        if not self.part_id or len(self.part_id) > 80 or not self.part_id.isprintable():
            self.note("part_id", "wrong-part-id", "a short name", shown(self.part_id or None))

    def _check_position(self) -> None:
        bench = self._bench
        if not self.position and bench is not None and len(bench.positions) == 1:
            self.position = bench.positions[0].name
        if not self.position:
            self.note("position", "missing-cell", "a position of the fixture", "nothing")
        elif bench is not None and bench.position(self.position) is None:
            expected = unknown_position(bench, self.position)
            self.note("position", "unknown-position", expected, shown(self.position))

    def _kind(self) -> Kind | None:
        text = self._cells["kind"]
        try:
            return Kind(text.lower())
        except ValueError:
            expected = one_of(text, [kind.value for kind in Kind])
            self.note("kind", "unknown-kind", expected, shown(text or None))
            return None

    def _value(self, column: str, read: Callable[[str], T]) -> T | None:
        """What the cell says, None where it is empty or refused (which is noted)."""
        text = self._cells[column]
        if not text:
            return None
        try:
            return read(text)
        except UnitError as error:
            self.note(column, "wrong-unit-or-value", error.expected, error.found)
            return None

    def _quantity(self, column: str, unit: str) -> float | None:
        return self._value(
            column, lambda text: parse_quantity(text, unit, decimal_comma=self._comma)
        )

    def _positive(self, column: str, unit: str) -> float | None:
        value = self._quantity(column, unit)
        if value is not None and value <= 0:
            self.note(column, "out-of-range", "a value above zero", shown(self._cells[column]))
            return None
        return value

    def _marking(self, kind: Kind) -> tuple[Marking, ...]:
        """What the marking may mean: nothing where it is no value, several where it is unclear."""
        text = self._cells["marking"]
        if not text:
            return ()
        try:
            return (read_marking(text, kind.value, decimal_comma=self._comma),)
        except MarkingAmbiguous as error:
            if not self._cells["nominal"]:
                self.note("marking", "ambiguous-marking", error.expected, error.found)
            return error.readings
        except MarkingUnreadable as error:
            if not self._cells["nominal"]:
                expected = f"{error.expected}, or the value in 'nominal'"
                self.note("marking", "unreadable-marking", expected, error.found)
        except UnitError as error:
            if not self._cells["nominal"]:
                self.note("marking", "ambiguous-marking", error.expected, error.found)
        return ()

    def _nominal(self, kind: Kind, markings: tuple[Marking, ...]) -> float | None:
        """The nominal value as listed; as marked where the list leaves it out."""
        if not self._cells["nominal"]:
            if not self._cells["marking"]:
                self.note("nominal", "missing-cell", "a value here or in 'marking'", "nothing")
            return markings[0].nominal if len(markings) == 1 else None
        nominal = self._positive("nominal", kind.unit)
        if nominal is not None and markings and self._marked(nominal, markings) is None:
            meant = " or ".join(format_quantity(one.nominal, kind.unit) for one in markings)
            self.note(
                "nominal",
                "nominal-contradicts-marking",
                f"{meant}, as the marking {shown(self._cells['marking'])} says",
                shown(self._cells["nominal"]),
            )
        return nominal

    @staticmethod
    def _marked(nominal: float, markings: tuple[Marking, ...]) -> Marking | None:
        """The reading of the marking that agrees with the listed value."""
        return next(
            (one for one in markings if isclose(one.nominal, nominal, rel_tol=SAME_VALUE_REL)),
            None,
        )

    def _tolerance(
        self, kind: Kind, nominal: float | None, markings: tuple[Marking, ...]
    ) -> tuple[float | None, float | None]:
        """The tolerance as listed; as marked where the list leaves it out."""
        if nominal is None:
            return None, None
        listed = self._value(
            "tolerance",
            lambda text: parse_tolerance(text, nominal, kind.unit, decimal_comma=self._comma),
        )
        if listed is not None:
            return listed
        marked = self._marked(nominal, markings)
        if self._cells["tolerance"] or marked is None:
            return None, None
        return marked.tolerance_low, marked.tolerance_high

    def _rating(self, markings: tuple[Marking, ...]) -> Rating:
        """The rated voltage as listed; a lower one in the marking contradicts it."""
        rating = self._value(
            "rated_voltage", lambda text: parse_rating(text, decimal_comma=self._comma)
        )
        if rating is None:
            return Rating()
        if not rating.stated and self._cells["safety_class"]:
            expected = "'V AC' or 'V DC' with it: across the line ratings are AC, others DC"
            self.note("rated_voltage", "rating-unstated", expected, self._cells["rated_voltage"])
        marked = [one.voltage_v for one in markings if one.voltage_v is not None]
        if rating.dc_v is not None and marked and min(marked) < rating.dc_v:
            self.note(
                "rated_voltage",
                "rating-contradicts-marking",
                f"{format_quantity(min(marked), 'V')} at most, as the marking says",
                shown(self._cells["rated_voltage"]),
            )
        return rating

    def _polarity(self, kind: Kind) -> Polarity:
        """As listed; where the list is silent, a dielectric that is polar by nature is polar."""
        text = self._cells["polarity"].lower()
        dielectric = self._cells["dielectric"].lower()
        if not text:
            natural = any(word in dielectric for word in _POLAR)
            unlike = any(word in dielectric for word in _NONPOLAR)
            return Polarity.POLAR if natural and not unlike else Polarity.NONPOLAR
        if text in {"polar", "polarised", "polarized"}:
            if kind is not Kind.CAPACITOR:
                self.note("polarity", "wrong-value", f"none for a {kind.value}", shown(text))
            return Polarity.POLAR
        if text not in _NONPOLAR:
            self.note("polarity", "unknown-word", "'polar' or 'nonpolar'", shown(text))
        return Polarity.NONPOLAR

    def _reverse_v(self, rating: Rating) -> float:
        value = self._quantity("reverse_voltage", "V")
        if value is None:
            return 0.0
        if rating.dc_v is not None and abs(value) > rating.dc_v:
            self.note(
                "reverse_voltage",
                "out-of-range",
                f"{format_quantity(rating.dc_v, 'V')} at most, the rated voltage",
                shown(self._cells["reverse_voltage"]),
            )
        return abs(value)

    def _working_v(self, rating: Rating) -> float | None:
        value = self._positive("working_voltage", "V")
        if value is not None and rating.dc_v is not None and value > rating.dc_v:
            self.note(
                "working_voltage",
                "out-of-range",
                f"{format_quantity(rating.dc_v, 'V')} at most, the rated voltage",
                shown(self._cells["working_voltage"]),
            )
        return value

    def _date(self, column: str) -> datetime | None:
        text = self._cells[column]
        if not text:
            return None
        try:
            if len(text) <= 10:
                return datetime.combine(date.fromisoformat(text), time(), UTC)
            moment = datetime.fromisoformat(text)
        except ValueError:
            self.note(column, "wrong-date", "a date written as 2026-01-31", shown(text))
            return None
        return moment.replace(tzinfo=UTC) if moment.tzinfo is None else moment.astimezone(UTC)

    def _safety_class(self, kind: Kind) -> str:
        text = self._cells["safety_class"].upper()
        if text and (_SAFETY_CLASS.fullmatch(text) is None or kind is not Kind.CAPACITOR):
            self.note(
                "safety_class",
                "wrong-value",
                "a class such as 'X2' or 'X1/Y2', of a capacitor",
                shown(self._cells["safety_class"]),
            )
        return text


def _check_ids(readers: list[_RowReader]) -> None:
    first: dict[str, int] = {}
    for reader in readers:
        row = first.setdefault(reader.part_id, reader.number)
        if row != reader.number and reader.part_id:
            reader.note(
                "part_id",
                "duplicate-part-id",
                "a name of its own",
                f"{shown(reader.part_id)}, which is in row {row} too",
            )


def _check_positions(readers: list[_RowReader], bench: Bench | None) -> None:
    """One part for each position, unless a person loads the parts one after another."""
    if bench is None or bench.fixture.loading == "by hand":
        return
    first: dict[str, int] = {}
    for reader in readers:
        row = first.setdefault(reader.position, reader.number)
        if row != reader.number and reader.position:
            reader.note(
                "position",
                "position-taken",
                "a position of its own, for no person loads this fixture",
                f"{shown(reader.position)}, where row {row} is too",
            )
