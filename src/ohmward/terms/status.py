"""What can be said of one reading before anyone looks at its number."""

from enum import StrEnum


class Status(StrEnum):
    """Only ``ok`` readings enter a derived quantity; the others are kept and say why."""

    OK = "ok"
    OVERLOAD = "overload"  # the meter reported overload or an overflow value
    UNBALANCED = "unbalanced"  # the meter could not balance its bridge or settle its range
    STALE = "stale"  # the reply cannot be newer than the last setting
    MALFORMED = "malformed"  # a reply came that is not what was asked for
    TIMEOUT = "timeout"  # no reply came by the deadline
    NOT_SET = "not-set"  # the meter did not take a setting: the read-back differs
    UNSETTLED = "unsettled"  # the settle rule was not met in its time
    REFUSED = "refused"  # the meter reported an error of its own
    DISCONNECTED = "disconnected"  # the part's contacts were found open afterwards
