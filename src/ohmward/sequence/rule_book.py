"""All named limits, by the names under which a sequence may ask for them."""

from ohmward.sequence.rules import RULES as IMPEDANCE_RULES
from ohmward.sequence.rules import Rule
from ohmward.sequence.rules_direct import DIRECT_RULES

RULES: dict[str, Rule] = {**IMPEDANCE_RULES, **{rule.name: rule for rule in DIRECT_RULES}}
