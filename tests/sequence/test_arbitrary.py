"""Whatever a sequence file holds: problems, never an exception of somebody else's."""

import json
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from tests.sequence.given import capacitor, inductor, make, resistor

from ohmward.sequence.rules import RULES
from ohmward.terms.quantity import QUANTITIES

WORDS = st.sampled_from(
    [
        *("1 kHz", "0 V", "5 V", "-5 %", "+5 %", "50 % of rating", "10 mA", "", "%", "1e400 V"),
        *("1e-200 Hz", "1e200 Hz", "capacitor", "1 nF", "nan", "-0 V", "1 k", "µ", "of rating"),
        *("sweep", "medium", "R-X"),
        *RULES,
    ]
)
SCALARS = st.one_of(
    st.booleans(), st.integers(-(10**20), 10**20), st.floats(), WORDS, st.text(max_size=8)
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: (
        st.fixed_dictionaries({"from": WORDS, "to": WORDS, "per_decade": st.integers(-1, 2000)})
        | st.lists(inner, max_size=3)
        | st.dictionaries(st.sampled_from(["from", "to", "per_decade", "kind", "up_to"]), inner)
    ),
    max_leaves=6,
)
STAGE = {
    "kind": "sweep",
    "name": "sweep",
    "frequency": ["1 kHz"],
    "level": "1 V",
    "bias": "0 V",
    "parts": {"kind": "capacitor"},
    "settle": {"tolerance": "1 %", "at_most": "1 s"},
    "repeats": 2,
    "interval": "1 s",
    "range": "1 kohm",
}
LIMIT = {
    "stage": "sweep",
    "quantity": "capacitance_f",
    "at": {"frequency": "1 kHz"},
    "min": "-5 %",
    "max": "+5 %",
    "source": "test",
}
HEAD = {
    "format": 1,
    "name": "test",
    "purpose": "p",
    "follows": "f",
    "kinds": ["capacitor"],
    "rating_allowed": "80 %",
}


def toml(value: Any) -> str:
    """A value as TOML has it on one line."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(k)} = {toml(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(toml(item) for item in value) + "]"
    if isinstance(value, float):
        return repr(value)
    return json.dumps(value)


def text_of(head: dict[str, Any], stages: list[Any], limits: list[Any]) -> str:
    lines = [f"{key} = {toml(value)}" for key, value in head.items()]
    return "\n".join([*lines, f"stage = {toml(stages)}", f"limit = {toml(limits)}"]) + "\n"


def changed(table: dict[str, Any]) -> st.SearchStrategy[dict[str, Any]]:
    """The table with a few of its keys, or others, holding anything."""
    keys = st.sampled_from([*table, "rule", "times", "pair", "closure", "frob"])
    rules = st.fixed_dictionaries(
        {}, optional={"rule": st.sampled_from([*RULES]), "quantity": st.sampled_from([*QUANTITIES])}
    )
    anything = st.dictionaries(keys, VALUES, max_size=2)
    return st.tuples(anything, rules if "quantity" in table else st.just({})).map(
        lambda pair: {**table, **pair[1], **pair[0]}
    )


@settings(max_examples=300, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    changed(HEAD),
    st.lists(changed(STAGE), min_size=1, max_size=2),
    st.lists(changed(LIMIT), max_size=2),
)
def test_a_brief_or_problems_and_nothing_else(
    head: dict[str, Any], stages: list[Any], limits: list[Any]
) -> None:
    parts = (capacitor(row=1), capacitor("C2", rated_v=None, dielectric=""), inductor(), resistor())
    with TemporaryDirectory() as folder:
        made = make(Path(folder), text_of(head, stages, limits), *parts)
    assert (made.brief is None) == bool(len(made.problems))
    assert all(p.id and p.key and p.expected and p.found for p in made.problems)
