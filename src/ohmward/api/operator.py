"""The person who loads parts by hand: asked at the terminal, answered with Enter."""

import sys

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
