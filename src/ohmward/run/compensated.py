"""Nothing is corrected twice: refuses a fixture's compensation where the meter has its own on."""

from collections.abc import Mapping

from ohmward.instruments.impedance_meter import CORRECTIONS
from ohmward.metrology.errors import CompensationMismatch


def refuse_twice(name: str, settings: Mapping[str, str]) -> None:
    """Raise CompensationMismatch where the meter says that it corrects for a fixture itself.

    ``settings`` are what `ImpedanceMeter.prepare` read back.
    """
    on = [one.removeprefix("correction_") for one in CORRECTIONS if settings.get(one) == "on"]
    if on:
        raise CompensationMismatch(
            f"{name}'s own {' and '.join(on)} correction is on: the fixture would be corrected "
            "for twice; switch it off, or do without a compensation file"
        )
