"""The three kinds of part, and what a person may want to know of each."""

from enum import StrEnum


class Kind(StrEnum):
    """A part's kind; its value is what people write in a parts list."""

    CAPACITOR = "capacitor"
    INDUCTOR = "inductor"
    RESISTOR = "resistor"

    @property
    def unit(self) -> str:
        """The SI unit of the nominal value: F, H or ohm."""
        return {"capacitor": "F", "inductor": "H", "resistor": "ohm"}[self.value]


class Polarity(StrEnum):
    """Whether a part minds the sign of its DC voltage."""

    POLAR = "polar"
    NONPOLAR = "nonpolar"
