"""A warden whose link to the scanner may fail and come back without ending the run."""

from contextlib import suppress

from ohmward.errors import LinkError
from ohmward.safety.handle import Ending, Warden


class PersistentWarden:
    """Asks a low-voltage warden once more where its link failed and was recovered.

    That is safe because such a warden has opened every relay and read that back before it
    raises LinkError; where it could not, it raises NotProvenSafe, which nobody retries.
    """

    def __init__(self, warden: Warden) -> None:
        self._warden = warden

    async def start(self) -> None:
        """As the warden inside."""
        await self._warden.start()

    async def lease(self, position: str, part_id: str = "") -> None:
        """Connect the part, at the second go if need be."""
        try:
            await self._warden.lease(position, part_id)
        except LinkError:
            await self._warden.lease(position, part_id)

    async def holds(self) -> bool:
        """As the warden inside."""
        return await self._warden.holds()

    async def release(self) -> None:
        """Open the meter path; after a fault of the link all has been opened for it."""
        with suppress(LinkError):
            await self._warden.release()

    async def stop(self) -> Ending:
        """As the warden inside."""
        return await self._warden.stop()
