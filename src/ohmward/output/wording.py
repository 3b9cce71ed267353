"""How output says times and values, the same everywhere."""


def duration(seconds: float) -> str:
    """Seconds as a person says them: ``42 s``, ``12 min``, ``3 h 05 min``."""
    if seconds < 100:
        return f"{seconds:.0f} s"
    minutes = round(seconds / 60)
    return f"{minutes} min" if minutes < 100 else f"{minutes // 60} h {minutes % 60:02d} min"
