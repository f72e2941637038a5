"""Conditions on findings: a small language of its own, parsed into a tree, never run as code.

Grammar (white space is free)::

    condition  = conjunction { "or" conjunction }
    conjunction = negation { "and" negation }
    negation   = "not" negation | "(" condition ")" | comparison | statement
    comparison = quantity order quantity [ order quantity ]
    order      = "<" | "<=" | ">" | ">=" | "==" | "!="
    statement  = field [ "is" [ "not" ] text ] | term
    quantity   = number | field
    field      = test "." name
    term       = a name from the table [terms]

A field is ``test.outcome``, ``test.statistic``, ``test.p_value``, ``test.power``,
``test.present`` (the test has spoken), ``test.failed``, or any parameter of the test.

Truth has three values. A quantity that is absent (the test was not run, did not apply or failed,
or gave no such number) makes its comparison *unknown*; ``not unknown`` is unknown, ``and`` and
``or`` follow Kleene (1952, Introduction to Metamathematics, section 64; from memory). Only what is
true takes effect. ``present`` and ``failed`` are always known.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass

from screener.core import Outcome, ScreenerError

__all__ = [
    "And",
    "Compare",
    "Condition",
    "ConditionError",
    "Field",
    "Is",
    "Not",
    "Number",
    "Or",
    "Term",
    "Truth",
    "did_you_mean",
    "fields_of",
    "parse",
    "parse_field",
    "write",
]

MAX_LENGTH = 4000
MAX_DEPTH = 40
SPOKEN = (Outcome.SUPPORTS_PLANET, Outcome.SUPPORTS_STAR, Outcome.INCONCLUSIVE)
_NUMERIC = ("statistic", "p_value", "power")
_KNOWN = ("present", "failed")
_KEYWORDS = ("and", "or", "not", "is")


class ConditionError(ScreenerError):
    """A condition that cannot be read: what is wrong, where (1-based column), and a cure."""

    def __init__(self, problem: str, column: int, cure: str = "") -> None:
        self.problem, self.column, self.cure = problem, column, cure
        super().__init__(f"column {column}: {problem}" + (f". {cure}" if cure else ""))

    def __reduce__(self) -> tuple[type[ConditionError], tuple[str, int, str]]:
        return (ConditionError, (self.problem, self.column, self.cure))


@dataclass(frozen=True)
class Number:
    """A number in a condition."""

    value: float


@dataclass(frozen=True)
class Field:
    """One answer of one test."""

    test: str
    name: str

    def __str__(self) -> str:
        return f"{self.test}.{self.name}"


@dataclass(frozen=True)
class Compare:
    """Quantities in a row with the orders between them; two or three of them."""

    quantities: tuple[Number | Field, ...]
    orders: tuple[str, ...]


@dataclass(frozen=True)
class Is:
    """A field that holds text equals, or does not equal, a text."""

    field: Field
    text: str
    negated: bool = False


@dataclass(frozen=True)
class Truth:
    """A field that is true or false by itself."""

    field: Field


@dataclass(frozen=True)
class Term:
    """A named condition from the table ``[terms]``."""

    name: str
    meaning: Condition


@dataclass(frozen=True)
class Not:
    item: Condition


@dataclass(frozen=True)
class And:
    items: tuple[Condition, ...]


@dataclass(frozen=True)
class Or:
    items: tuple[Condition, ...]


Condition = Compare | Is | Truth | Term | Not | And | Or


def did_you_mean(word: str, known: Collection[str]) -> str:
    """``"Did you mean 'x'?"`` or nothing."""
    close = difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)
    return f"Did you mean '{close[0]}'?" if close else ""


@dataclass(frozen=True)
class _Token:
    kind: str  # "number", "text", "name", "order", "paren", "end"
    text: str
    column: int


_TOKEN = re.compile(
    r"""(?P<space>\s+)
      | (?P<number>[-+]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][-+]?[0-9]+)?(?![A-Za-z_.0-9]))
      | (?P<name>[A-Za-z_][A-Za-z_0-9]*(?:\.[A-Za-z_][A-Za-z_0-9]*)?(?!\.))
      | (?P<order><=|>=|==|!=|<|>)
      | (?P<paren>[()])
      | (?P<text>"[^"\\\n]*"|'[^'\\\n]*')""",
    re.VERBOSE | re.ASCII,
)
_INSTEAD = {"&": "and", "&&": "and", "|": "or", "||": "or", "!": "not", "=": "==", "≤": "<="}


def _tokens(source: str) -> Iterator[_Token]:
    at = 0
    while at < len(source):
        match = _TOKEN.match(source, at)
        if match is None:
            bad = source[at : at + 2] if source[at : at + 2] in _INSTEAD else source[at]
            if bad in "\"'":
                raise ConditionError("this text has no end", at + 1, "Close the quote")
            cure = f"Write '{_INSTEAD[bad]}'" if bad in _INSTEAD else "See 'screener rules explain'"
            raise ConditionError(f"{bad!r} has no meaning here", at + 1, cure)
        kind = match.lastgroup or ""
        if kind != "space":
            yield _Token(kind, match.group(), at + 1)
        at = match.end()
    yield _Token("end", "the end", len(source) + 1)


def parse(source: str, terms: Mapping[str, Condition] | None = None) -> Condition:
    """Read a condition.

    Parameters
    ----------
    source : str
    terms : mapping, optional
        Named conditions that it may refer to.

    Raises
    ------
    ConditionError
        With the column of the first thing that cannot be read.
    """
    if len(source) > MAX_LENGTH:
        problem = f"a condition of {len(source)} characters (at most {MAX_LENGTH})"
        raise ConditionError(problem, MAX_LENGTH + 1, "Split it into [terms]")
    parser = _Parser(list(_tokens(source)), terms or {})
    tree = parser.condition(0)
    last = parser.next()
    if last.kind != "end":
        cure = "Join two conditions with 'and' or 'or'"
        raise ConditionError(f"unexpected {last.text!r} after a whole condition", last.column, cure)
    return tree


def parse_field(source: str) -> Field:
    """Read ``test.name``, a field that may hold a number.

    Raises
    ------
    ConditionError
    """
    tokens = list(_tokens(source))
    if len(tokens) != 2 or tokens[0].kind != "name" or "." not in tokens[0].text:
        raise ConditionError(f"{source!r} is no quantity", 1, "Quantities look like test.statistic")
    test, name = tokens[0].text.split(".")
    if name == "outcome" or name in _KNOWN:
        raise ConditionError(
            f"{source!r} is not a number", 1, "Take test.statistic, or a parameter"
        )
    return Field(test, name)


class _Parser:
    """Recursive descent, one method for each line of the grammar."""

    def __init__(self, tokens: list[_Token], terms: Mapping[str, Condition]) -> None:
        self.tokens, self.terms, self.at = tokens, terms, 0

    @property
    def head(self) -> _Token:
        return self.tokens[self.at]

    def next(self) -> _Token:
        token = self.tokens[self.at]
        self.at = min(self.at + 1, len(self.tokens) - 1)
        return token

    def take(self, word: str) -> bool:
        if self.head.text == word and self.head.kind in ("name", "paren"):
            self.next()
            return True
        return False

    def condition(self, depth: int) -> Condition:
        items = [self.conjunction(depth)]
        while self.take("or"):
            items.append(self.conjunction(depth))
        return items[0] if len(items) == 1 else Or(tuple(items))

    def conjunction(self, depth: int) -> Condition:
        items = [self.negation(depth)]
        while self.take("and"):
            items.append(self.negation(depth))
        return items[0] if len(items) == 1 else And(tuple(items))

    def negation(self, depth: int) -> Condition:
        start = self.head
        if depth > MAX_DEPTH:
            problem = f"nested deeper than {MAX_DEPTH}"
            raise ConditionError(problem, start.column, "Split it into [terms]")
        if self.take("not"):
            return Not(self.negation(depth + 1))
        if self.take("("):
            inner = self.condition(depth + 1)
            if not self.take(")"):
                problem = f"expected ')' instead of {self.head.text!r}"
                raise ConditionError(problem, self.head.column, "Close the parenthesis")
            return inner
        return self.leaf()

    def leaf(self) -> Condition:
        start = self.head
        first = self.quantity()
        if self.head.kind == "order":
            return self.comparison(first, start)
        if isinstance(first, Number):
            raise ConditionError(
                "a number by itself is no condition", start.column, "Compare it with a field"
            )
        if isinstance(first, Term):
            return first
        if self.take("is"):
            return self.statement(first, start)
        if first.name == "outcome" or first.name in _NUMERIC:
            cure = 'Write: is "supports star"' if first.name == "outcome" else "Compare it: < 0.01"
            raise ConditionError(f"{first} by itself is no condition", start.column, cure)
        return Truth(first)

    def quantity(self) -> Number | Field | Term:
        token = self.next()
        if token.kind == "number":
            return Number(float(token.text))
        if token.kind == "text":
            cure = 'Texts stand after "is": test.outcome is "supports star"'
            raise ConditionError(f"unexpected text {token.text}", token.column, cure)
        if token.kind != "name" or token.text in _KEYWORDS:
            raise ConditionError(
                f"expected a test or a number instead of {token.text!r}",
                token.column,
                "Conditions look like: test.p_value < 0.01 and not other.present",
            )
        if "." in token.text:
            return Field(*token.text.split("."))
        if token.text not in self.terms:
            cure = did_you_mean(token.text, self.terms) or (
                "Name a field as test.statistic, or define the name under [terms]"
            )
            raise ConditionError(f"unknown term {token.text!r}", token.column, cure)
        return Term(token.text, self.terms[token.text])

    def comparison(self, first: Number | Field | Term, start: _Token) -> Condition:
        quantities: list[Number | Field] = [_checked(first, start)]
        orders: list[str] = []
        while self.head.kind == "order":
            if len(orders) == 2:
                cure = "Split it with 'and'"
                raise ConditionError("too long a comparison", self.head.column, cure)
            orders.append(self.next().text)
            token = self.head
            if token.kind == "text":
                cure = f"Write: is {token.text}"
                raise ConditionError("texts are not compared by order", token.column, cure)
            quantities.append(_checked(self.quantity(), token))
        if not any(isinstance(q, Field) for q in quantities):
            raise ConditionError("compares numbers only", start.column, "Compare a field of a test")
        return Compare(tuple(quantities), tuple(orders))

    def statement(self, field: Field, start: _Token) -> Is:
        negated = self.take("not")
        token = self.next()
        if field.name in _NUMERIC or field.name in _KNOWN:
            raise ConditionError(
                f"{field} holds no text", start.column, "Only outcomes and text parameters do"
            )
        if token.kind != "text":
            cure = f'Write: {field} is "supports star"'
            raise ConditionError(f"expected a text instead of {token.text!r}", token.column, cure)
        text = token.text[1:-1]
        if field.name == "outcome" and text not in SPOKEN:
            if text in (Outcome.NOT_APPLICABLE, Outcome.FAILED):
                word = "failed" if text == Outcome.FAILED else "present"
                cure = f"Write: {'not ' if word == 'present' else ''}{field.test}.{word}"
            else:
                cure = did_you_mean(text, SPOKEN) or "Outcomes: " + ", ".join(SPOKEN)
            raise ConditionError(f"no such outcome to ask for: {text!r}", token.column, cure)
        return Is(field, text, negated)


def _checked(item: Number | Field | Term, token: _Token) -> Number | Field:
    """The item, if it may stand in a comparison."""
    if isinstance(item, Term):
        cure = "Use it by itself, or compare a field"
        raise ConditionError(f"{item.name!r} is a condition, not a number", token.column, cure)
    if isinstance(item, Field) and (item.name == "outcome" or item.name in _KNOWN):
        cure = 'Outcomes are asked with "is"; present and failed stand alone'
        raise ConditionError(f"{item} is not a number", token.column, cure)
    return item


def fields_of(node: Condition) -> tuple[Field, ...]:
    """Every field a condition looks at, in order, each once."""
    found: dict[Field, None] = {}

    def walk(item: Condition) -> None:
        match item:
            case Compare(quantities):
                found.update((q, None) for q in quantities if isinstance(q, Field))
            case Is(field) | Truth(field):
                found[field] = None
            case Term(_, meaning):
                walk(meaning)
            case Not(inner):
                walk(inner)
            case And(items) | Or(items):
                for each in items:
                    walk(each)

    walk(node)
    return tuple(found)


def write(node: Condition) -> str:
    """The condition as text; ``parse`` of it gives the same tree."""
    match node:
        case Compare(quantities, orders):
            words = [_quantity_text(quantities[0])]
            for order, quantity in zip(orders, quantities[1:], strict=True):
                words += [order, _quantity_text(quantity)]
            return " ".join(words)
        case Is(field, text, negated):
            quote = "'" if '"' in text else '"'
            return f"{field} is {'not ' if negated else ''}{quote}{text}{quote}"
        case Truth(field):
            return str(field)
        case Term(name):
            return name
        case Not(item):
            return f"not {_bracketed(item, (And, Or))}"
        case And(items):
            return " and ".join(_bracketed(i, (And, Or)) for i in items)
        case Or(items):
            return " or ".join(_bracketed(i, (Or,)) for i in items)


def _bracketed(node: Condition, kinds: tuple[type, ...]) -> str:
    return f"({write(node)})" if isinstance(node, kinds) else write(node)


def _quantity_text(item: Number | Field) -> str:
    return str(item) if isinstance(item, Field) else repr(item.value)
