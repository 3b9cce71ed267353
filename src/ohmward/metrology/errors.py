"""What metrology refuses to compute, by name: each is bad input (exit code 2), not a number."""

from ohmward.errors import OhmwardError


class MetrologyError(OhmwardError, ValueError):
    """Root of the refusals of this room; a NaN is never a refusal, it stays a NaN."""

    exit_code = 2


class ShapeMismatch(MetrologyError):
    """Arrays that belong together have shapes that do not broadcast."""


class BadFrequency(MetrologyError):
    """A frequency is zero, negative or infinite."""


class BadCovariance(MetrologyError):
    """An uncertainty is negative or a correlation is outside −1…1: that is no covariance."""


class UnknownPair(MetrologyError):
    """A pair of quantities that no meter of ours sends."""


class AccuracyHole(MetrologyError):
    """The accuracy table says nothing where it is needed."""


class TooFewPoints(MetrologyError):
    """Fewer points than parameters, or than the method needs to say anything."""


class CompensationMismatch(MetrologyError):
    """A compensation that does not belong to this measurement: other fixture, too old, twice."""


class NotConverged(MetrologyError):
    """A fit found no minimum that it can vouch for."""
