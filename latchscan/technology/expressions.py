"""Boolean expressions over layers: text in, a small frozen tree out.

A technology file derives its roles with text such as ``active and pplus and not poly``.
The language has three operators, strongest first: ``not``, ``and``, ``or``; and three
functions that take an expression and a length in um:

``grow(x, 1.0)``
    x with every edge moved outwards.
``shrink(x, 0.5)``
    x with every edge moved inwards.
``wider(x, 3.0)``
    the parts of x that are at least that wide.

The parser descends through one function a precedence level.  It knows neither layers nor
geometry: names are checked by `latchscan.technology.names` and drawn by the layout.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import NamedTuple, TypeAlias

from latchscan.errors import TechnologyError

MAX_DEPTH = 40
"""Deepest nesting that is accepted; deeper text is a slip or an attack, not a derivation."""
MAX_TEXT = 2000
"""Longest text that is accepted [characters]."""
MAX_LENGTH_UM = 1000.0
"""Longest length that a function accepts [um]."""

OPERATORS = ("not", "and", "or")


@dataclass(frozen=True, slots=True)
class Name:
    """A layer or a derived name."""

    name: str


@dataclass(frozen=True, slots=True)
class And:
    """What all items have in common; two items or more."""

    items: tuple[Expression, ...]


@dataclass(frozen=True, slots=True)
class Or:
    """What at least one item covers; two items or more."""

    items: tuple[Expression, ...]


@dataclass(frozen=True, slots=True)
class Not:
    """What the item leaves uncovered."""

    item: Expression


@dataclass(frozen=True, slots=True)
class Grow:
    """The item with every edge moved outwards by `um` [um]."""

    item: Expression
    um: float


@dataclass(frozen=True, slots=True)
class Shrink:
    """The item with every edge moved inwards by `um` [um]."""

    item: Expression
    um: float


@dataclass(frozen=True, slots=True)
class Wider:
    """The parts of the item that are at least `um` wide [um]."""

    item: Expression
    um: float


Expression: TypeAlias = Name | And | Or | Not | Grow | Shrink | Wider

FUNCTIONS: Mapping[str, Callable[[Expression, float], Expression]] = {
    "grow": Grow,
    "shrink": Shrink,
    "wider": Wider,
}
RESERVED = (*OPERATORS, *FUNCTIONS)
"""Words that cannot name a layer."""


class ExpressionError(TechnologyError):
    """An expression that cannot be read.

    Parameters
    ----------
    message
        What is wrong and what was expected.
    column
        Place in the expression's text, counted from 1.
    """

    def __init__(self, message: str, column: int) -> None:
        super().__init__(message)
        self.column = column

    def __reduce__(self) -> tuple[object, ...]:
        """Keep the column when the error travels back from a worker process."""
        return (ExpressionError, (self.message, self.column))


class _Token(NamedTuple):
    kind: str
    text: str
    column: int

    @property
    def shown(self) -> str:
        """The token as a message shows it."""
        return "the end" if self.kind == "end" else f"`{self.text}`"


_TOKEN = re.compile(
    r"(?P<space>\s+)"
    r"|(?P<number>(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][-+]?[0-9]+)?)"
    r"|(?P<word>[A-Za-z_][A-Za-z0-9_]*)"
    r"|(?P<mark>[(),])"
)
_MEANT = {"|": "or", "+": "or", "!": "not", "~": "not", "-": "and not"}
"""Words for the signs that other notations use."""


def _tokens(text: str) -> list[_Token]:
    if len(text) > MAX_TEXT:
        raise ExpressionError(
            f"too long, expected at most {MAX_TEXT} characters; name a part of it under `derived`",
            MAX_TEXT + 1,
        )
    found = []
    place = 0
    while place < len(text):
        match = _TOKEN.match(text, place)
        if match is None:
            shown = text[place] if text[place].isprintable() else ascii(text[place])[1:-1]
            word = _MEANT.get(text[place], "and")
            raise ExpressionError(
                f"`{shown}` is not part of an expression, expected a word such as `{word}`",
                place + 1,
            )
        kind = str(match.lastgroup)
        word = match.group()
        if kind != "space":
            known = word in RESERVED or kind == "mark"
            found.append(_Token(word if known else kind, word, place + 1))
        place = match.end()
    found.append(_Token("end", "", len(text) + 1))
    return found


class _Parser:
    """One pass over the tokens of an expression."""

    def __init__(self, text: str) -> None:
        self.tokens = _tokens(text)
        self.place = 0
        self.depth = 0

    @property
    def next(self) -> _Token:
        return self.tokens[self.place]

    def take(self) -> _Token:
        token = self.next
        self.place += 1
        return token

    def expect(self, kind: str, what: str) -> _Token:
        if self.next.kind != kind:
            raise ExpressionError(f"expected {what}, got {self.next.shown}", self.next.column)
        return self.take()

    def deeper(self, token: _Token) -> None:
        self.depth += 1
        if self.depth > MAX_DEPTH:
            raise ExpressionError(
                f"nested too deep, expected at most {MAX_DEPTH} levels; name a part of it"
                " under `derived`",
                token.column,
            )

    def either(self) -> Expression:
        items = [self.both()]
        while self.next.kind == "or":
            self.take()
            items.append(self.both())
        return items[0] if len(items) == 1 else Or(tuple(items))

    def both(self) -> Expression:
        items = [self.negated()]
        while self.next.kind == "and":
            self.take()
            items.append(self.negated())
        return items[0] if len(items) == 1 else And(tuple(items))

    def negated(self) -> Expression:
        if self.next.kind != "not":
            return self.operand()
        self.deeper(self.take())
        item = Not(self.negated())
        self.depth -= 1
        return item

    def operand(self) -> Expression:
        token = self.next
        if token.kind == "word":
            self.take()
            if self.next.kind == "(":
                # a name with a forgotten operator behind it is as likely as a misspelt function
                for near in get_close_matches(token.text, FUNCTIONS, 1):
                    message = f"undefined function `{token.text}`, expected `{near}`"
                    raise ExpressionError(message, token.column)
            return Name(token.text)
        if token.kind == "(":
            self.deeper(self.take())
            item = self.either()
            self.expect(")", "`)`, `and` or `or`")
            self.depth -= 1
            return item
        if token.kind in FUNCTIONS:
            return self.function()
        raise ExpressionError(
            f"expected a name, `not`, `(` or a function, got {token.shown}", token.column
        )

    def function(self) -> Expression:
        token = self.take()
        self.deeper(token)
        self.expect("(", f"`(` after `{token.text}`, as in `{token.text}(nwell, 1.0)`")
        item = self.either()
        self.expect(",", f"`,` and a length in um, as in `{token.text}(nwell, 1.0)`")
        number = self.expect("number", "a length in um such as 1.0")
        um = float(number.text)
        if not 0.0 < um <= MAX_LENGTH_UM:
            raise ExpressionError(
                f"{number.text} is out of range, expected a length above 0 and at most"
                f" {MAX_LENGTH_UM:g} um",
                number.column,
            )
        self.expect(")", "`)`")
        self.depth -= 1
        return FUNCTIONS[token.text](item, um)


def parse_expression(text: str) -> Expression:
    """Tree of an expression.

    Parameters
    ----------
    text
        The expression; spaces and line ends may stand anywhere between words.

    Returns
    -------
    Expression
        Chains of one operator are one node: ``a and b and c`` is one `And` of three.

    Raises
    ------
    ExpressionError
        With the column of the first word that does not fit.

    Examples
    --------
    >>> parse_expression("active and not poly")
    And(items=(Name(name='active'), Not(item=Name(name='poly'))))
    """
    parser = _Parser(text)
    expression = parser.either()
    rest = parser.next
    if rest.kind == "word" and rest.text.lower() in OPERATORS:
        raise ExpressionError(
            f"{rest.shown} is not an operator here, expected `{rest.text.lower()}` in small"
            " letters between two names",
            rest.column,
        )
    if rest.kind in {"word", "number", "(", "not", *FUNCTIONS}:
        raise ExpressionError(f"expected `and` or `or` before {rest.shown}", rest.column)
    if rest.kind != "end":
        raise ExpressionError(f"expected the end, got {rest.shown}", rest.column)
    return expression


def name_columns(text: str) -> tuple[tuple[str, int], ...]:
    """Every name in an expression's text with its column from 1, in order of appearance.

    Raises
    ------
    ExpressionError
        If the text holds a character that no expression holds.
    """
    return tuple((token.text, token.column) for token in _tokens(text) if token.kind == "word")


def names_in(expression: Expression) -> tuple[str, ...]:
    """Names that an expression uses, each once, in order of appearance.

    Examples
    --------
    >>> names_in(parse_expression("a and not (b or a)"))
    ('a', 'b')
    """
    match expression:
        case Name(name):
            return (name,)
        case And(items) | Or(items):
            return tuple(dict.fromkeys(name for item in items for name in names_in(item)))
        case Not(item) | Grow(item, _) | Shrink(item, _) | Wider(item, _):
            return names_in(item)


def reach_um(expression: Expression, named_um: Mapping[str, float] | None = None) -> float:
    """Distance over which the surroundings of a point decide whether it is covered [um].

    Parameters
    ----------
    expression
        The expression.
    named_um
        Reach of the names that are themselves derived [um]; a name not in it is drawn and
        has none.

    Notes
    -----
    Functions inside one another add up, items side by side count by the largest.  Keeping
    only parts of width w shrinks by w/2 and grows by w/2 again, hence reaches w.

    Examples
    --------
    >>> reach_um(parse_expression("grow(wider(nwell, 3.0), 1.0) or drawn"))
    4.0
    """
    match expression:
        case Name(name):
            return 0.0 if named_um is None else named_um.get(name, 0.0)
        case And(items) | Or(items):
            return max(reach_um(item, named_um) for item in items)
        case Not(item):
            return reach_um(item, named_um)
        case Grow(item, um) | Shrink(item, um) | Wider(item, um):
            return um + reach_um(item, named_um)
