"""Expressions: precedence, functions, columns of errors.

Reference of precedence: Python's own grammar (not > and > or), by brute force over all truth
values of the names.
"""

from __future__ import annotations

import itertools
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from latchscan.errors import TechnologyError
from latchscan.technology.expressions import (
    And,
    Expression,
    ExpressionError,
    Grow,
    Name,
    Not,
    Or,
    Shrink,
    Wider,
    name_columns,
    names_in,
    parse_expression,
    reach_um,
)

A, B, C = Name("a"), Name("b"), Name("c")


def truth(expression: Expression, values: dict[str, bool]) -> bool:
    match expression:
        case Name(name):
            return values[name]
        case And(items):
            return all(truth(item, values) for item in items)
        case Or(items):
            return any(truth(item, values) for item in items)
        case Not(item):
            return not truth(item, values)
    raise AssertionError(expression)


@pytest.mark.parametrize(
    ("text", "tree"),
    [
        ("a", A),
        ("a and b and c", And((A, B, C))),
        ("a or b and c", Or((A, And((B, C))))),
        ("(a or b) and c", And((Or((A, B)), C))),
        ("not a and b", And((Not(A), B))),
        ("not (a and b)", Not(And((A, B)))),
        ("not not a", Not(Not(A))),
        ("grow(a, 1.0)", Grow(A, 1.0)),
        ("shrink(a or b,.5)", Shrink(Or((A, B)), 0.5)),
        ("wider(\n  a,\n  3)", Wider(A, 3.0)),
        ("grow(wider(a, 3.0), 1e-1) and not b", And((Grow(Wider(A, 3.0), 0.1), Not(B)))),
        ("((a))", A),
    ],
)
def test_tree(text: str, tree: Expression) -> None:
    assert parse_expression(text) == tree


def _texts() -> st.SearchStrategy[str]:
    return st.recursive(
        st.sampled_from(["a", "b", "c"]),
        lambda inner: st.one_of(
            inner.map(lambda x: f"not {x}"),
            inner.map(lambda x: f"({x})"),
            st.tuples(inner, inner).map(" and ".join),
            st.tuples(inner, inner).map(" or ".join),
        ),
        max_leaves=8,
    )


@given(_texts())
def test_precedence_is_that_of_python(text: str) -> None:
    tree = parse_expression(text)
    for values in itertools.product([False, True], repeat=3):
        names = dict(zip("abc", values, strict=True))
        assert truth(tree, names) == eval(text, {"__builtins__": {}}, names)


@pytest.mark.parametrize(
    ("text", "column", "message"),
    [
        ("", 1, "expected a name, `not`, `(` or a function, got the end"),
        ("a and", 6, "got the end"),
        ("a b", 3, "expected `and` or `or` before `b`"),
        ("a not b", 3, "expected `and` or `or` before `not`"),
        ("a AND b", 3, "expected `and` in small letters"),
        ("a & b", 3, "expected a word such as `and`"),
        ("a | b", 3, "expected a word such as `or`"),
        ("a - b", 3, "expected a word such as `and not`"),
        ("a and (b or c", 14, "expected `)`, `and` or `or`, got the end"),
        ("a)", 2, "expected the end, got `)`"),
        ("a, b", 2, "expected the end, got `,`"),
        ("and a", 1, "got `and`"),
        ("a and grwo(b, 1.0)", 7, "undefined function `grwo`, expected `grow`"),
        ("a (b)", 3, "expected `and` or `or` before `(`"),
        ("grow a", 6, "expected `(` after `grow`"),
        ("grow(a)", 7, "expected `,` and a length in um"),
        ("grow(a, b)", 9, "expected a length in um such as 1.0, got `b`"),
        ("grow(a, -1)", 9, "`-` is not part of an expression"),
        ("grow(a, 0)", 9, "out of range"),
        ("grow(a, 1e9)", 9, "at most 1000 um"),
        ("grow(a, 1.0", 12, "expected `)`, got the end"),
        ("3.0 and a", 1, "got `3.0`"),
        ("a and 3x", 7, "got `3`"),
        ("a \x00", 3, "`\\x00`"),
        ("(" * 100 + "a" + ")" * 100, 41, "nested too deep"),
        ("not " * 400 + "a", 161, "nested too deep"),
        (" or ".join(["a"] * 500), 2001, "too long"),
    ],
)
def test_error_names_its_column(text: str, column: int, message: str) -> None:
    with pytest.raises(ExpressionError) as caught:
        parse_expression(text)
    assert caught.value.column == column
    assert message in caught.value.message
    assert isinstance(caught.value, TechnologyError)


def test_error_keeps_its_column_through_a_worker() -> None:
    error = pickle.loads(pickle.dumps(ExpressionError("wrong", 7)))
    assert (error.message, error.column) == ("wrong", 7)


def test_names_come_once_and_in_order() -> None:
    assert names_in(parse_expression("grow(c or a, 1.0) and not (b or a)")) == ("c", "a", "b")


def test_name_columns_tell_every_appearance() -> None:
    assert name_columns("not (a or b) and a") == (("a", 6), ("b", 11), ("a", 18))


@pytest.mark.parametrize(
    ("text", "reach"),
    [
        ("a and not b", 0.0),
        ("grow(a, 1.5)", 1.5),
        ("shrink(grow(a, 1.5), 0.5)", 2.0),
        ("wider(a, 3.0) or grow(b, 1.0)", 3.0),
        ("not (a and grow(wider(b, 3.0), 1.0))", 4.0),
    ],
)
def test_reach_adds_up_inside_one_another(text: str, reach: float) -> None:
    """Counted by hand."""
    assert reach_um(parse_expression(text)) == reach


def test_reach_of_derived_names_counts() -> None:
    assert reach_um(parse_expression("grow(a, 1.0) or b"), {"a": 2.0, "b": 2.5}) == 3.0


@given(st.text(max_size=60))
def test_any_text_parses_or_names_a_column(text: str) -> None:
    try:
        column = len(names_in(parse_expression(text)))
    except ExpressionError as error:
        column = error.column
    assert 1 <= column <= len(text) + 1
