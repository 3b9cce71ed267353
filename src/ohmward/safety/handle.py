"""What a runner may ask of a warden, whether it lives in this process or in one of its own."""

from dataclasses import dataclass
from typing import Protocol


@dataclass(frozen=True, kw_only=True, slots=True)
class Ending:
    """How a path ended: ``proven`` dead, or not, and then ``reasons`` say what to do by hand.

    Any end is this end: there is no third answer, and an ending that is not proven has at
    least one reason.
    """

    proven: bool
    reasons: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        if not self.proven and not self.reasons:
            raise ValueError("an ending that is not proven says why")

    @staticmethod
    def of_all(endings: "tuple[Ending, ...]") -> "Ending":
        """The bench's ending from those of its paths: proven only if every one is."""
        reasons = tuple(reason for ending in endings for reason in ending.reasons)
        return Ending(proven=all(ending.proven for ending in endings), reasons=reasons)

    def as_dict(self) -> dict[str, object]:
        """The shape in which an ending crosses a pipe or goes into a log."""
        return {"proven": self.proven, "reasons": list(self.reasons)}


class Warden(Protocol):
    """Holds every contact between a part and what can energise or measure it.

    Each method raises SafetyTrip when something was not as it must be and everything has been
    made safe, LinkError when a link failed and everything has been made safe, NotProvenSafe
    when the safe state could not be proven.
    """

    async def start(self) -> None:
        """Bring the bench into its safe state and prove it."""

    async def lease(self, position: str, part_id: str = "") -> None:
        """Connect the meter to one position, proven dead; the contacts have been read back.

        ``part_id`` names the part that is to be measured; a hand-loaded fixture needs it,
        because there a person is asked for that part. One lease at a time.
        """

    async def holds(self) -> bool:
        """Whether the contacts of the open lease, and no others, still read back closed."""

    async def release(self) -> None:
        """End the lease: open the meter path and read back that it is open."""

    async def stop(self) -> Ending:
        """Make everything safe, whatever happened before; never cancelled, never raises."""
