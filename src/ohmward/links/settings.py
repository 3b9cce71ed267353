"""How one link is set up: terminations, times, limits and the serial line's form."""

from dataclasses import dataclass
from typing import Literal

Parity = Literal["none", "even", "odd", "mark", "space"]
FlowControl = Literal["none", "xon/xoff", "rts/cts"]


@dataclass(frozen=True, kw_only=True, slots=True)
class LinkSettings:
    """Everything a link needs to know beyond its address; nothing is left to a library's default.

    An empty ``read_termination`` means that the interface itself marks the end of a message
    (HiSLIP, USB, GPIB). A socket or a serial line marks none: there ``receive`` then returns
    whatever bytes are there, and ``query`` refuses.
    """

    read_termination: bytes = b"\n"
    write_termination: bytes = b"\n"
    timeout_s: float = 5.0
    """For one exchange, from the first byte written to the last byte read."""
    open_timeout_s: float = 5.0
    opening_delay_s: float = 0.0
    """Waited after opening, before anything is said: some instruments restart when opened."""
    drain_s: float = 0.05
    """A link counts as drained once it has been silent for this long."""
    gap_s: float = 0.0
    """Least time between the end of one exchange and the next command."""
    reopen_budget_s: float = 30.0
    """How long a lost link is opened again and again before it is given up."""
    max_reply_bytes: int = 1 << 20
    free_running: bool = False
    """The instrument talks unasked: bytes that wait before a command are no fault."""
    baud_rate: int = 9600
    data_bits: Literal[5, 6, 7, 8] = 8
    parity: Parity = "none"
    stop_bits: Literal[1, 2] = 1
    flow_control: FlowControl = "none"

    def __post_init__(self) -> None:
        if self.timeout_s <= 0 or self.open_timeout_s <= 0 or self.drain_s <= 0:
            raise ValueError("timeout_s, open_timeout_s and drain_s are above zero")
        if self.max_reply_bytes < 1:
            raise ValueError("max_reply_bytes is at least 1")
