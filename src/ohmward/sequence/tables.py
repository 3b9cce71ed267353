"""The tables that every kind of stage is made of: its place, its name, which parts it is for."""

import re
from typing import Annotated, ClassVar, Self

from pydantic import AfterValidator, Field, PrivateAttr

from ohmward.sequence.values import NominalValue
from ohmward.setup.quantities import Model, OneOrMany, quantity, wrong
from ohmward.terms.kind import Kind, Polarity
from ohmward.terms.role import Role

Share = Annotated[float, quantity("1", above=0, maximum=1)]
Times = Annotated[float, quantity("1", above=0, maximum=1000)]
STAGE_NAME = r"^[a-z0-9][a-z0-9 ._-]{0,39}$"


def _stage_name(value: str) -> str:
    if re.fullmatch(STAGE_NAME, value) is None:
        raise wrong("a name of lower-case letters, digits, spaces and . _ -", value)
    return value


StageName = Annotated[
    str, AfterValidator(_stage_name), Field(json_schema_extra={"pattern": STAGE_NAME})
]


class Table(Model):
    """A table of a list of tables, which knows its place so that problems can name it.

    ``whole`` is False for what could be saved of a table with something wrong in it: a check
    must not report what is only missing because it was wrong.
    """

    _place: int = PrivateAttr(default=1)
    _whole: bool = PrivateAttr(default=True)

    @property
    def place(self) -> int:
        """Its place in the file, counted from 1."""
        return self._place

    @property
    def whole(self) -> bool:
        """Whether nothing was wrong with it."""
        return self._whole

    def placed(self, place: int, *, whole: bool = True) -> Self:
        """Itself, told where it stands."""
        self._place, self._whole = place, whole
        return self


class PartFilter(Model):
    """Which parts something applies to; every key that is there must fit."""

    kind: OneOrMany[Kind] = Field(default_factory=tuple, description="kinds of part")
    dielectric: OneOrMany[str] = Field(
        default_factory=tuple,
        description="dielectrics, as the parts list names them",
        examples=["PP"],
    )
    polarity: Polarity | None = Field(None, description="polar or nonpolar parts only")
    above: NominalValue | None = Field(None, description="nominal value above this")
    up_to: NominalValue | None = Field(None, description="nominal value up to and with this")


class StageTable(Table):
    """What every kind of stage has."""

    roles: ClassVar[frozenset[Role]] = frozenset()
    energises: ClassVar[bool] = False  # whether it exists to put a high voltage on a part
    for_kinds: ClassVar[frozenset[Kind]] = frozenset(Kind)
    measures: ClassVar[frozenset[str]] = frozenset()  # names of quantities

    name: StageName = Field(
        description="what limits and tables call this stage: lower case", examples=["sweep"]
    )
    parts: PartFilter = Field(default_factory=PartFilter, description="which parts get this stage")
