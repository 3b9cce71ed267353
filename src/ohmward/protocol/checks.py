"""Checks at the end of binary frames: sum, exclusive or, and two 16-bit CRCs."""

from collections.abc import Callable


def sum8(data: bytes) -> int:
    """The sum of all bytes, modulo 256."""
    return sum(data) & 0xFF


def xor8(data: bytes) -> int:
    """All bytes exclusive-ored."""
    result = 0
    for byte in data:
        result ^= byte
    return result


def crc16_modbus(data: bytes) -> int:
    """CRC-16 with polynomial 0x8005 reflected, start 0xFFFF: 0x4B37 for ``123456789``."""
    crc = 0xFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ 0xA001 if crc & 1 else crc >> 1
    return crc


def crc16_ccitt(data: bytes) -> int:
    """CRC-16 with polynomial 0x1021, start 0xFFFF: 0x29B1 for ``123456789``."""
    crc = 0xFFFF
    for byte in data:
        crc ^= byte << 8
        for _ in range(8):
            crc = ((crc << 1) ^ 0x1021) & 0xFFFF if crc & 0x8000 else crc << 1
    return crc


# name in a driver file: (function, bytes that the check takes)
CHECKS: dict[str, tuple[Callable[[bytes], int], int]] = {
    "none": (lambda data: 0, 0),
    "sum8": (sum8, 1),
    "xor8": (xor8, 1),
    "crc16-modbus": (crc16_modbus, 2),
    "crc16-ccitt": (crc16_ccitt, 2),
}
