"""Linear two-terminal networks of resistors, inductors and capacitors, and nothing else.

Everything a simulated part does at a frequency is such a network: dielectric loss is a row of
RC relaxation branches, skin effect an RL ladder, a shorted turn a secondary seen from the
primary. That way a foreign circuit simulator can be given the very same part (``netlist``).
"""

import math
from collections.abc import Iterator
from dataclasses import dataclass

OPEN = complex(math.inf, 0.0)


@dataclass(frozen=True, slots=True)
class R:
    """A resistance in ohm: Z = R."""

    ohm: float

    def impedance(self, s: complex) -> complex:
        """Impedance in ohm at s = jω."""
        return complex(self.ohm)


@dataclass(frozen=True, slots=True)
class L:
    """An inductance in henry: Z = sL."""

    henry: float

    def impedance(self, s: complex) -> complex:
        """Impedance in ohm at s = jω."""
        return s * self.henry


@dataclass(frozen=True, slots=True)
class C:
    """A capacitance in farad: Z = 1/(sC)."""

    farad: float

    def impedance(self, s: complex) -> complex:
        """Impedance in ohm at s = jω; open at 0 Hz."""
        admittance = s * self.farad
        return 1 / admittance if admittance else OPEN


class Series:
    """Members one after another: impedances add."""

    def __init__(self, *members: "Network") -> None:
        self.members = members

    def impedance(self, s: complex) -> complex:
        """Impedance in ohm at s = jω."""
        total = 0j
        for member in self.members:
            total += member.impedance(s)
        return total


class Parallel:
    """Members side by side: admittances add."""

    def __init__(self, *members: "Network") -> None:
        self.members = members

    def impedance(self, s: complex) -> complex:
        """Impedance in ohm at s = jω; 0 where a member is a dead short."""
        total = 0j
        for member in self.members:
            z = member.impedance(s)
            if z == 0:
                return 0j
            if math.isfinite(z.real):
                total += 1 / z
        return 1 / total if total else OPEN


Network = R | L | C | Series | Parallel


def netlist(network: Network, top: str = "1", bottom: str = "0") -> list[str]:
    """The network as element lines of a SPICE netlist between two nodes."""
    return list(_lines(network, top, bottom, "x"))


def _lines(network: Network, top: str, bottom: str, name: str) -> Iterator[str]:
    if isinstance(network, Parallel):
        for index, member in enumerate(network.members):
            yield from _lines(member, top, bottom, f"{name}_{index}")
    elif isinstance(network, Series):
        last = len(network.members) - 1
        upper = top
        for index, member in enumerate(network.members):
            lower = bottom if index == last else f"n{name}_{index}"
            yield from _lines(member, upper, lower, f"{name}_{index}")
            upper = lower
    elif isinstance(network, R):
        yield f"R{name} {top} {bottom} {network.ohm!r}"
    elif isinstance(network, L):
        yield f"L{name} {top} {bottom} {network.henry!r}"
    else:
        yield f"C{name} {top} {bottom} {network.farad!r}"
