"""Moves relays one at a time, each by the relay law before and by reading back after."""

from ohmward.errors import LinkError
from ohmward.safety.equipment import Scanner
from ohmward.safety.faults import BenchFault
from ohmward.safety.ledger import Ledger
from ohmward.safety.permit import check_relay_move
from ohmward.safety.wiring import Contact, Wiring


class Switchboard:
    """The bench's contacts as they were read back last; a contact is made or broken.

    A relay whose contact is made without power is switched on to break it, so that a scanner
    that loses its power leaves the supply isolated and the discharge connected.
    """

    def __init__(self, *, scanner: Scanner, wiring: Wiring, ledger: Ledger) -> None:
        self._scanner = scanner
        self._wiring = wiring
        self._ledger = ledger
        self._closed: frozenset[str] = frozenset()

    async def refresh(self) -> None:
        """Read every channel; afterwards the board knows what is made."""
        try:
            self._closed = await self._scanner.closed()
        except LinkError:
            self._ledger.scanner_is_clean = False
            raise
        self._ledger.scanner_is_clean = True
        self._note_rail()

    def made(self, contact: Contact) -> bool:
        """Whether this contact was made when it was read last."""
        return (contact.channel in self._closed) != contact.made_unpowered

    async def move(
        self, contact: Contact, *, make: bool, voltage_v: float = 0.0, current_a: float = 0.0
    ) -> None:
        """Make or break a contact; nothing else may have moved.

        ``voltage_v`` and ``current_a`` bound what there is to switch. Raises LawBroken before
        anything is sent, BenchFault when the read-back is not exactly as it must be.
        """
        if self.made(contact) == make:
            return
        check_relay_move(contact, voltage_v=voltage_v, current_a=current_a)
        power = make != contact.made_unpowered
        expected = self._closed | {contact.channel} if power else self._closed - {contact.channel}
        try:
            if power:
                await self._scanner.close((contact.channel,))
            else:
                await self._scanner.open((contact.channel,))
        finally:
            self._ledger.scanner_is_clean = False  # until the read-back says so
        await self.refresh()
        if self._closed != expected:
            wrong = ", ".join(sorted(self._closed ^ expected))
            raise BenchFault(f"channel {wrong} is not as it was told to be")

    def expect(self, made: tuple[Contact, ...], *, among: tuple[Contact, ...]) -> None:
        """Raise BenchFault unless exactly ``made`` of ``among`` are made."""
        for contact in among:
            if self.made(contact) != (contact in made):
                state = "made" if self.made(contact) else "broken"
                raise BenchFault(f"contact {contact.channel} is {state}")

    def _note_rail(self) -> None:
        self._ledger.on_rail = {
            wired.position for wired in self._wiring.positions if self.made(wired.connect)
        }
