"""Rules: from findings to a grade, with every reason written down.

A rule file (TOML) holds rules, prior odds, thresholds and advice; ``RULE_KEYS`` documents each
key, ``grammar`` the conditions. The engine sees findings only, never how they were made.
"""

from screener.rules.engine import grade
from screener.rules.grammar import ConditionError
from screener.rules.reading import DEFAULT_FILE, load_rules
from screener.rules.types import RULE_KEYS, Graded, Rule, RuleSet

__all__ = [
    "ConditionError",
    "DEFAULT_FILE",
    "Graded",
    "RULE_KEYS",
    "Rule",
    "RuleSet",
    "grade",
    "load_rules",
]
