"""The enclosure's interlock: closed only when everything that is known says so."""

from ohmward.errors import InstrumentRefused
from ohmward.instruments.agreed import agreed
from ohmward.instruments.talker import Talker
from ohmward.terms.status import Status

OPEN_FLAG = "interlock_open"


class Interlock:
    """The door's contacts as a module tells them, or the flag of a supply that watches them.

    A driver with a reading ``interlock`` has a field of that name, and may have ``opened``: the
    second, antivalent contact of the door, which is on exactly when the door is open.
    """

    def __init__(self, talker: Talker) -> None:
        self._talker = talker
        flags = [
            flag
            for one in (talker.driver.reading["state"].fields if talker.can_ask("state") else ())
            for flag in one.flags
        ]
        if not talker.can_ask("interlock") and OPEN_FLAG not in flags:
            raise InstrumentRefused("the driver says of no enclosure whether it is closed")

    async def closed(self) -> bool:
        """Whether the enclosure is closed; two contacts that contradict each other are not.

        Raises LinkError's children when it cannot be known.
        """
        talker = self._talker
        await talker.fresh()
        if not talker.can_ask("interlock"):
            flags = (await agreed(talker, "state", "state")).values["state"]
            return isinstance(flags, tuple) and OPEN_FLAG not in flags
        answer = await agreed(talker, "interlock", "interlock")
        opened = answer.values.get("opened", False)
        return answer.status is Status.OK and answer.values["interlock"] is True and opened is False
