"""Asks twice where an answer decides about safety and its shape cannot show that bytes are lost.

``(@101,102)`` that loses four bytes is ``(@102)``, and ``10`` that loses one is ``0``: both are
whole answers. Two answers in a row that agree are taken for true.
"""

from ohmward.errors import ReplyMalformed
from ohmward.instruments.talker import Answer, Talker

ASKED_AT_MOST = 4


async def agreed(talker: Talker, reading: str, field: str) -> Answer:
    """The answer whose ``field`` was the same twice in a row.

    Raises ReplyMalformed, with the link distrusted, when no two of a few answers agree.
    """
    last = await talker.ask(reading)
    for _ in range(ASKED_AT_MOST - 1):
        answer = await talker.ask(reading)
        if answer.values[field] == last.values[field] and answer.status is last.status:
            return answer
        last = answer
    reason = f"{reading} was answered otherwise each time, last {last.reply[:60]!r}"
    talker.link.distrust(reason)
    raise ReplyMalformed(reason)
