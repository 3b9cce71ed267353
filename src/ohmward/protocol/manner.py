"""How one instrument writes: what its driver states once for all of its replies."""

from collections.abc import Mapping
from dataclasses import dataclass, field

from ohmward.protocol.numbers import Form
from ohmward.setup.driver import Driver
from ohmward.terms.status import Status


@dataclass(frozen=True, kw_only=True, slots=True)
class Manner:
    """How an instrument writes, all replies alike: what a driver states once for all fields."""

    form: Form = Form.ANY
    width: int | None = None
    plus: bool = False
    any_case: bool = True
    short_forms: bool = True
    status: Mapping[str, Status] = field(default_factory=dict)
    overflow: Mapping[float, Status] = field(default_factory=dict)

    @staticmethod
    def of(driver: Driver, *, any_case: bool, short_forms: bool) -> "Manner":
        """The manner that a driver states."""
        return Manner(
            form=Form(driver.numbers.form or "any"),
            width=driver.numbers.width,
            plus=bool(driver.numbers.plus),
            any_case=any_case,
            short_forms=short_forms,
            status={code: Status(word) for code, word in driver.status.items()},
            overflow={float(text): Status(word) for text, word in driver.overflow.items()},
        )
