"""The person who loads parts or standards by hand: asked at the terminal, answered with Enter."""

import sys
from typing import Protocol

import trio

from ohmward.errors import OhmwardError


class TerminalOperator:
    """Asks on the terminal and waits for Enter; without a terminal there is nobody to ask."""

    async def place(self, part_id: str, position: str) -> None:
        """Ask for a part and return when the person says that it lies there."""
        if not sys.stdin.isatty():
            raise OhmwardError(
                f"{part_id} must be put into position {position} by hand, "
                "but nobody is at this terminal; run from a terminal, or use a scanner"
            )
        sys.stderr.write(
            f"Discharge {part_id}, put it into position {position}, then press Enter "
            "(Ctrl-C stops the run): "
        )
        sys.stderr.flush()
        await trio.lowlevel.wait_readable(sys.stdin)
        if not sys.stdin.readline():
            raise OhmwardError(f"nobody placed {part_id}: the terminal was closed")


class Hand(Protocol):
    """Whoever puts standards into the fixture."""

    async def put(self, kind: str, position: str, insertion: int) -> None:
        """Return once this standard, and nothing else, is in this position."""


class TerminalHand:
    """Asks for each standard on the terminal and waits for Enter; once for all opens."""

    def __init__(self) -> None:
        self._emptied = False

    async def put(self, kind: str, position: str, insertion: int) -> None:
        """Ask, and return when the person says that it is done."""
        if kind == "open" and self._emptied:
            return
        self._emptied = kind == "open"
        what = f"Put the {kind} into position {position}, and nothing else anywhere"
        if kind == "open":
            what = "Take every part and standard out of the fixture and close its clips"
        again = "" if insertion == 0 else " anew (take it out first)"
        sys.stderr.write(f"{what}{again}, then press Enter (Ctrl-C stops): ")
        sys.stderr.flush()
        await trio.lowlevel.wait_readable(sys.stdin)
        if not sys.stdin.readline():
            raise OhmwardError(f"nobody placed the {kind}: the terminal was closed")


class HandAsOperator:
    """The person who has placed the standard already, when a hand-loaded fixture asks again."""

    async def place(self, part_id: str, position: str) -> None:
        """Nothing is left to be done."""
