"""Whether a value can be carried to the temperature or the age that a limit states."""

from ohmward.metrology.ageing import RATES
from ohmward.metrology.temperature import DIELECTRICS
from ohmward.sequence.model import Condition, LimitTable
from ohmward.sequence.notes import Notes
from ohmward.setup.toml import one_of
from ohmward.terms.dielectric import dielectric_key
from ohmward.terms.part import Part

CORRECTABLE = ("capacitance_f", "cs_f", "cp_f")


def asks_for_reference(at: Condition) -> bool:
    """Whether a limit's condition wants the value somewhere else than where it was measured."""
    return at.reference_temperature is not None or at.reference_age is not None


def can_refer(table: LimitTable, part: Part, key: str, notes: Notes) -> bool:
    """Whether this part's value can be carried to the limit's reference; notes why not."""
    at = table.at
    if not asks_for_reference(at):
        return True
    before = len(notes.problems)
    if table.quantity not in CORRECTABLE:
        notes.sequence(
            "limit-not-correctable",
            f"{key}.quantity",
            expected=f"one of {', '.join(CORRECTABLE)}: nothing else is carried to a reference",
            found=table.quantity,
        )
    name = dielectric_key(part.dielectric)
    for asked, known, what in (
        (at.reference_temperature, DIELECTRICS, "temperature coefficient"),
        (at.reference_age, RATES, "ageing rate"),
    ):
        if asked is not None and name not in known:
            notes.cell(
                "no-coefficient",
                part,
                "dielectric",
                expected=f"a dielectric with a {what}: {one_of(name, sorted(known))}",
                found=part.dielectric or "nothing",
            )
    if at.reference_age is not None:
        _check_age(part, notes)
    return len(notes.problems) == before


def _check_age(part: Part, notes: Notes) -> None:
    """Ageing is counted from the last heating, and a high voltage since then has upset it."""
    if part.last_heated is None:
        notes.cell(
            "age-unknown",
            part,
            "last_heated",
            expected="when it was last heated above 125 degC (soldering counts), because a limit "
            "carries its value to an age",
            found="nothing",
        )
    elif part.last_energised is not None and part.last_energised > part.last_heated:
        notes.cell(
            "age-unknown",
            part,
            "last_energised",
            expected="no voltage since it was last heated: voltage upsets the count of its age",
            found=part.last_energised.date().isoformat(),
        )
