"""How hypothesis searches: the same examples each time in `make test`, new and more in `make fuzz`.

A suite that decides whether a change lands must not depend on luck; the search for new examples
is a tier of its own.
"""

import os

from hypothesis import HealthCheck, settings

settings.register_profile(
    "suite",
    derandomize=True,
    deadline=None,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.register_profile("fuzz", max_examples=5000, deadline=None)
settings.load_profile(os.environ.get("HYPOTHESIS_PROFILE", "suite"))
