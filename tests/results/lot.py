"""Readings as the journal holds them, for tests: name what matters, the rest is plain."""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ohmward.terms.accuracy import AccuracyBand, ImpedanceAccuracy
from ohmward.terms.kind import Kind
from ohmward.terms.limit import Limit
from ohmward.terms.part import Part

PLAIN: dict[str, Any] = {
    "part_id": "P1",
    "position": "1",
    "stage": "sweep",
    "repeat": 0,
    "elapsed_s": 0.0,
    "time_utc": np.datetime64("2024-01-01T00:00:00"),
    "point": 0,
    "frequency_hz": 1000.0,
    "level_set_v": 1.0,
    "bias_set_v": 0.0,
    "bias_set_a": 0.0,
    "level_v": 1.0,
    "bias_v": 0.0,
    "bias_a": float("nan"),
    "pair": "R-X",
    "first": 1.0,
    "second": 1.0,
    "first_resolution": 0.0,
    "second_resolution": 0.0,
    "range": "1",
    "integration": "medium",
    "status": "ok",
    "temperature_c": 23.0,
    "humidity_pct": 40.0,
    "instrument": "meter",
}


def readings_of(rows: Sequence[Mapping[str, Any]]) -> dict[str, NDArray[Any]]:
    """The columns of these readings, numbered from 1."""
    full = [{**PLAIN, "reading": number, **row} for number, row in enumerate(rows, 1)]
    return {
        name: np.array(
            [row[name] for row in full], dtype=object if isinstance(PLAIN.get(name), str) else None
        )
        for name in ("reading", *PLAIN)
    }


def flat_accuracy(magnitude_rel: float, phase_rad: float, **more: Any) -> ImpedanceAccuracy:
    """One band that covers everything; normal, so that u is half of what is stated."""
    band = AccuracyBand(
        frequency_min_hz=1.0,
        frequency_max_hz=1e9,
        impedance_min_ohm=0.0,
        impedance_max_ohm=1e12,
        magnitude_rel=magnitude_rel,
        phase_rad=phase_rad,
    )
    return ImpedanceAccuracy(**{"distribution": "normal", "bands": (band,), **more})


def part_of(kind: Kind = Kind.CAPACITOR, nominal: float = 1e-7, part_id: str = "P1") -> Part:
    """A part of that kind."""
    return Part(part_id=part_id, position="1", kind=kind, nominal=nominal)


def limit_on(
    quantity: str, minimum: float | None = None, maximum: float | None = None, **more: Any
) -> Limit:
    """A limit on a quantity of part P1 in stage sweep."""
    plain = {"part_id": "P1", "stage": "sweep", "source": "the test"}
    return Limit(**{**plain, **more}, quantity=quantity, minimum=minimum, maximum=maximum)
