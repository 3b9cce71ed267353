"""VISA addresses: the forms of VPP-4.3, read as PyVISA itself reads them."""

import pytest
from pyvisa.rname import ResourceName

from ohmward.setup.address import AddressError, read_address

GOOD = [
    ("TCPIP::192.0.2.10::5025::SOCKET", "socket"),
    ("TCPIP0::meter.example::5025::SOCKET", "socket"),
    ("TCPIP::127.0.0.1::hislip0,5000::INSTR", "hislip"),
    ("TCPIP::127.0.0.1::hislip0::INSTR", "hislip"),
    ("TCPIP::192.0.2.10::hislip0", "hislip"),
    ("TCPIP::192.0.2.10::INSTR", "vxi-11"),
    ("TCPIP::192.0.2.10::inst0::INSTR", "vxi-11"),
    ("TCPIP::127.0.0.1,5000::inst0::INSTR", "vxi-11"),
    ("TCPIP::192.0.2.10::gpib0,12::INSTR", "vxi-11"),
    ("ASRL/dev/ttyUSB0::INSTR", "serial"),
    ("ASRL/dev/pts/3::INSTR", "serial"),
    ("ASRL3::INSTR", "serial"),
    ("ASRLCOM3::INSTR", "serial"),
    ("USB::0x1234::0x5678::SN42::INSTR", "usb"),
    ("USB0::0x1234::0x5678::SN42::0::INSTR", "usb"),
    ("GPIB0::12::INSTR", "gpib"),
    ("GPIB::12::3::INSTR", "gpib"),
]

BAD = [
    "",
    "meter",
    "TCPIP::192.0.2.10::SOCKET",
    "TCPIP::192.0.2.10::99999::SOCKET",
    "TCPIP::192.0.2.10::0::SOCKET",
    "TCPIP::300.0.2.10::5025::SOCKET",
    "TCPIP::192.0.2::5025::SOCKET",
    "TCPIP::fe80::1::5025::SOCKET",
    "tcpip::192.0.2.10::5025::socket",
    "TCPIP::::5025::SOCKET",
    "TCPIP::a b::5025::SOCKET",
    "ASRL::INSTR",
    "USB::0x12345::0x5678::SN::INSTR",
    "USB::0x1234::INSTR",
    "GPIB::31::INSTR",
    "GPIB::12::SOCKET",
]


@pytest.mark.parametrize(("text", "kind"), GOOD)
def test_a_good_address_is_good_for_pyvisa_too(text: str, kind: str) -> None:
    assert read_address(text).kind == kind
    ResourceName.from_string(text)


@pytest.mark.parametrize("text", BAD)
def test_a_bad_address_is_refused_with_an_example(text: str) -> None:
    with pytest.raises(AddressError) as caught:
        read_address(text)
    assert caught.value.expected


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("TCPIP::h::5025::SOCKET", "TCPIP0::H::05025::SOCKET"),
        ("TCPIP::h::hislip0::INSTR", "TCPIP0::h::hislip0,4880"),
        ("TCPIP::h", "TCPIP::h::inst0::INSTR"),
        ("USB::4660::22136::SN::INSTR", "USB0::0x1234::0x5678::SN::0::INSTR"),
        ("GPIB::12", "GPIB0::12::INSTR"),
    ],
)
def test_two_spellings_of_one_link(one: str, other: str) -> None:
    assert read_address(one).link == read_address(other).link


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("TCPIP::h::5025::SOCKET", "TCPIP::h::5026::SOCKET"),
        ("TCPIP::h::hislip0::INSTR", "TCPIP::h::hislip1::INSTR"),
        ("ASRL/dev/ttyUSB0::INSTR", "ASRL/dev/ttyusb0::INSTR"),
        ("GPIB::12::INSTR", "GPIB::12::1::INSTR"),
        ("GPIB0::12::INSTR", "GPIB1::12::INSTR"),
    ],
)
def test_two_links(one: str, other: str) -> None:
    assert read_address(one).link != read_address(other).link
