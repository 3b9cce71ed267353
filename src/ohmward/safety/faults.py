"""Why a part or the bench stops; inside the warden only, it makes everything safe first."""

from ohmward.errors import NotProvenSafe, OhmwardError


class PartFault(OhmwardError):
    """The part is the cause: it stops, is discharged and proven, and the lot goes on.

    ``connection`` is what the fault says of the part's connection, or ''.
    """

    def __init__(self, message: str, *, connection: str = "") -> None:
        super().__init__(message)
        self.connection = connection


class BenchFault(OhmwardError):
    """The bench is the cause: trip, and the lot stops.

    ``source_suspect`` says that the supply may be feeding although it says that it is off.
    """

    def __init__(self, message: str, *, source_suspect: bool = False) -> None:
        super().__init__(message)
        self.source_suspect = source_suspect


class PositionUnproven(NotProvenSafe):
    """One position could not be proven dead; ``position`` says which."""

    def __init__(self, position: str, message: str) -> None:
        super().__init__(
            f"position {position} is not proven dead: {message}; by hand: stay clear, "
            f"discharge the part through a resistor, short its leads, then take it out"
        )
        self.position = position
