"""Whether a stage or a limit is for a part."""

from ohmward.sequence.dielectric import dielectric_key
from ohmward.sequence.tables import PartFilter
from ohmward.terms.part import Part

NOMINAL_TOLERANCE = 1e-9  # 1 nF read as "1000 pF" is still 1 nF


def fits(parts: PartFilter, part: Part) -> bool:
    """Whether every key of the filter lets the part through; an empty filter lets all."""
    above, up_to = parts.above, parts.up_to
    return (
        (not parts.kind or part.kind in parts.kind)
        and (
            not parts.dielectric
            or dielectric_key(part.dielectric) in {dielectric_key(one) for one in parts.dielectric}
        )
        and (parts.polarity is None or part.polarity is parts.polarity)
        and (
            above is None
            or (above.kind is part.kind and part.nominal > above.value * (1 + NOMINAL_TOLERANCE))
        )
        and (
            up_to is None
            or (up_to.kind is part.kind and part.nominal <= up_to.value * (1 + NOMINAL_TOLERANCE))
        )
    )
