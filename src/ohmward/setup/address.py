"""VISA resource addresses: checks how one is written, and says when two mean the same link.

The forms are those of the VISA library specification (VPP-4.3, resource syntax), with the
ports that avoid privileged ones: ``hislip0,4880`` and ``127.0.0.1,5000::inst0``. PyVISA knows
the words TCPIP, SOCKET, INSTR and the others in capitals only, so they are asked for.
"""

import re
from dataclasses import dataclass

_HOST = r"(?P<host>[A-Za-z0-9](?:[A-Za-z0-9_.-]*[A-Za-z0-9])?)"
_FORMS: tuple[tuple[str, re.Pattern[str]], ...] = (
    ("socket", re.compile(rf"TCPIP(?P<board>\d*)::{_HOST}::(?P<port>\d+)::SOCKET")),
    (
        "hislip",
        re.compile(
            rf"TCPIP(?P<board>\d*)::{_HOST}::(?P<device>(?i:hislip)\d*)(?:,(?P<port>\d+))?"
            r"(?:::INSTR)?"
        ),
    ),
    (
        "vxi-11",
        re.compile(
            rf"TCPIP(?P<board>\d*)::{_HOST}(?:,(?P<port>\d+))?"
            r"(?:::(?P<device>(?!(?i:instr$|socket$|hislip))[A-Za-z][A-Za-z0-9_]*(?:,\d+)?))?(?:::INSTR)?"
        ),
    ),
    ("serial", re.compile(r"ASRL(?P<device>\d+|[^\s:]*[^\s:\d][^\s:]*)(?:::INSTR)?")),
    (
        "usb",
        re.compile(
            r"USB(?P<board>\d*)::(?P<maker>(?:0[xX])?[0-9A-Fa-f]{1,5})"
            r"::(?P<model>(?:0[xX])?[0-9A-Fa-f]{1,5})::(?P<serial>[^\s:]+)"
            r"(?:::(?P<interface>\d{1,3}))?(?:::INSTR)?"
        ),
    ),
    (
        "gpib",
        re.compile(
            r"GPIB(?P<board>\d*)::(?P<primary>\d{1,2})(?:::(?P<secondary>\d{1,2}))?"
            r"(?:::INSTR)?"
        ),
    ),
)
_EXAMPLES = {
    "TCPIP": "'TCPIP::192.0.2.10::5025::SOCKET', 'TCPIP::192.0.2.10::hislip0::INSTR' "
    "or 'TCPIP::192.0.2.10::inst0::INSTR'",
    "ASRL": "'ASRL/dev/ttyUSB0::INSTR' or 'ASRL3::INSTR'",
    "USB": "'USB::0x1234::0x5678::SERIAL::INSTR'",
    "GPIB": "'GPIB0::12::INSTR'",
}


class AddressError(ValueError):
    """No VISA address: ``expected`` says what one looks like."""

    def __init__(self, expected: str) -> None:
        super().__init__(f"expected {expected}")
        self.expected = expected


@dataclass(frozen=True, kw_only=True, slots=True)
class Address:
    """A VISA address: ``text`` as written, ``kind`` of link, ``link`` the same for one link.

    ``kind`` is ``socket``, ``hislip``, ``vxi-11``, ``serial``, ``usb`` or ``gpib``.
    """

    text: str
    kind: str
    link: str


def read_address(text: str) -> Address:
    """Check how an address is written. Raises AddressError."""
    stripped = text.strip()
    for kind, form in _FORMS:
        match = form.fullmatch(stripped)
        if match is not None:
            fields = match.groupdict()
            _check_ranges(kind, fields)
            return Address(text=stripped, kind=kind, link=_same_link(kind, fields))
    for interface, example in _EXAMPLES.items():
        if stripped.upper().startswith(interface):
            raise AddressError(f"a VISA address, words in capitals, such as {example}")
    everything = "; ".join(_EXAMPLES.values())
    raise AddressError(f"a VISA address such as {everything}")


def _check_ranges(kind: str, fields: dict[str, str | None]) -> None:
    port = fields.get("port")
    if port is not None and not 1 <= int(port) <= 65535:
        raise AddressError("a port from 1 to 65535")
    host = fields.get("host") or ""
    numbers = host.split(".")
    if all(number.isdigit() for number in numbers) and (
        len(numbers) != 4 or any(int(number) > 255 for number in numbers)
    ):
        raise AddressError("a host name or four numbers from 0 to 255")
    if kind == "gpib" and max(int(fields["primary"] or 0), int(fields["secondary"] or 0)) > 30:
        raise AddressError("a primary and secondary GPIB address from 0 to 30")
    for name in ("maker", "model"):
        value = fields.get(name)
        if value is not None and int(value, 16 if value[:2].lower() == "0x" else 10) > 0xFFFF:
            raise AddressError("USB numbers from 0x0000 to 0xFFFF")


def _same_link(kind: str, fields: dict[str, str | None]) -> str:
    """One text for all spellings of one link: boards and devices that are left out filled in."""
    defaults = {"board": "0", "secondary": "", "interface": "0", "port": ""}
    if kind == "hislip":
        defaults["port"] = "4880"
    if kind == "vxi-11":
        defaults["device"] = "inst0"
    parts = [kind]
    for name, value in fields.items():
        chosen = value or defaults.get(name, "")
        if name in {"maker", "model"}:
            chosen = str(int(chosen, 16 if chosen[:2].lower() == "0x" else 10))
        elif name in {"port", "board", "primary", "secondary", "interface"} and chosen:
            chosen = str(int(chosen))
        elif kind != "serial" and name != "serial":
            chosen = chosen.lower()
        parts.append(chosen)
    return "/".join(parts)
