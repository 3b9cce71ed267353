"""The preferred values of IEC 60063: E3 to E192, one decade each.

E3 to E24 were rounded by hand and are listed; E48, E96 and E192 follow 10^(i/N) rounded to
three digits, except 9.20 of E192, where the formula gives 9.19.
"""

from bisect import bisect_left
from functools import cache
from math import floor, isfinite, log10

_E24 = (
    *(1.0, 1.1, 1.2, 1.3, 1.5, 1.6, 1.8, 2.0, 2.2, 2.4, 2.7, 3.0),
    *(3.3, 3.6, 3.9, 4.3, 4.7, 5.1, 5.6, 6.2, 6.8, 7.5, 8.2, 9.1),
)
_THINNED = {"E24": 1, "E12": 2, "E6": 4, "E3": 8}
_COMPUTED = {"E48": 48, "E96": 96, "E192": 192}

SERIES = ("E3", "E6", "E12", "E24", "E48", "E96", "E192")


@cache
def series_values(name: str) -> tuple[float, ...]:
    """The values of one decade from 1.0 up, rising. Raises KeyError for an unknown name."""
    if name in _THINNED:
        return _E24[:: _THINNED[name]]
    count = _COMPUTED[name]
    values = (round(10 ** (index / count), 2) for index in range(count))
    return tuple(9.20 if value == 9.19 else value for value in values)


def nearest_preferred(value: float, name: str) -> float:
    """The preferred value nearest to ``value`` by ratio. Raises ValueError unless it is > 0."""
    if not (isfinite(value) and value > 0):
        raise ValueError(f"expected a positive value, found {value}")
    decade = floor(log10(value))
    decades = (decade - 1, decade, decade + 1)
    values = [float(f"{mantissa}e{power}") for power in decades for mantissa in series_values(name)]
    index = bisect_left(values, value)
    around = values[max(index - 1, 0) : index + 1]
    return min(around, key=lambda near: abs(log10(near / value)))


def is_preferred(value: float, name: str) -> bool:
    """True if ``value`` stands in the series, to within the last digit of a float."""
    return value > 0 and abs(nearest_preferred(value, name) / value - 1.0) < 1e-9
