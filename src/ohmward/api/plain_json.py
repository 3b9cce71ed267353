"""JSON as the commands print it."""

import json
from typing import Any


def as_json(value: Any) -> str:
    """Indented JSON; NaN and infinities are refused, because JSON has none."""
    return json.dumps(value, indent=1, ensure_ascii=False, allow_nan=False)
