"""Whether what answers at an address is what the driver and the bench say it is."""

from collections.abc import Callable

from ohmward.errors import WrongIdentity
from ohmward.setup.driver import Driver
from ohmward.setup.driver_tables import IdentityTable


def identity_check(
    driver: Driver, *, address: str = "", serial_number: str = ""
) -> Callable[[bytes], None]:
    """A check that returns for the right identity and raises WrongIdentity for any other."""
    table = driver.identity

    def check(answer: bytes) -> None:
        if table is None:
            return
        text = answer.decode("ascii", "backslashreplace")
        wanted = _mismatch(table, text)
        if wanted:
            raise WrongIdentity(f"expected {wanted}, found {text[:200]!r}", address=address)
        if serial_number and table.serial_field is not None:
            found = _field(table, text, table.serial_field)
            if found != serial_number:
                raise WrongIdentity(
                    f"expected serial number {serial_number}, found {found!r} in {text[:200]!r}",
                    address=address,
                )

    return check


def _mismatch(table: IdentityTable, text: str) -> str:
    """What was expected of the identity, or '' when it is right."""
    if table.exactly:
        return "" if text == table.exactly else f"the identity {table.exactly!r}"
    if table.starts_with:
        fits = text.startswith(table.starts_with)
        return "" if fits else f"an identity that starts with {table.starts_with!r}"
    parts = [part.strip() for part in text.split(table.separator)]
    if len(parts) != len(table.fields):
        return f"an identity of {len(table.fields)} fields"
    for place, (want, part) in enumerate(zip(table.fields, parts, strict=True), start=1):
        if want and want != part:
            return f"{want!r} as field {place} of the identity"
    return ""


def _field(table: IdentityTable, text: str, place: int) -> str:
    parts = text.split(table.separator)
    return parts[place - 1].strip() if place <= len(parts) else ""
