"""Arithmetic in a sequence file."""

import math
from contextlib import suppress
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.quantities import unit
from planner.sequence.expression import LONGEST, ExpressionError, parse_expression

TIME = unit("s").dimension
NAMES = {"split": TIME, "hold": TIME, "depth": unit("Er").dimension, "share": unit("").dimension}
COLUMNS = {
    "split": np.array([1e-3, 2e-3]),
    "hold": np.array([0.5, 20.0]),
    "depth": np.array([9.0, 12.0]),
    "share": np.array([0.5, 0.25]),
}


@pytest.mark.parametrize(
    ("text", "value", "unit_text"),
    [
        ("2*split + 40 us", [2.04e-3, 4.04e-3], "s"),
        ("hold - split - split", [0.498, 19.996], "s"),
        ("hold / 2 / 2", [0.125, 5.0], "s"),
        ("-(hold - 1 s)", [0.5, -19.0], "s"),
        ("- -hold", [0.5, 20.0], "s"),
        ("2 + 3*4 - 6/3", [12.0, 12.0], ""),
        ("(2 + 3)*4", [20.0, 20.0], ""),
        ("min(hold, 1 s, 2 s)", [0.5, 1.0], "s"),
        ("max(hold, 1 s)", [1.0, 20.0], "s"),
        ("abs(split - hold)", [0.499, 19.998], "s"),
        ("sqrt(hold*hold)", [0.5, 20.0], "s"),
        ("depth * share", [4.5, 3.0], "Er"),
        ("hold * 50 %", [0.25, 10.0], "s"),
        ("depth / hold", [18.0, 0.6], "Er/s"),
        ("5 Er/ms * split", [5.0, 10.0], "Er"),
        ("1e-3 s", [1e-3, 1e-3], "s"),
        ("40us", [4e-5, 4e-5], "s"),
    ],
)
def test_value_and_unit_are_those_worked_out_by_hand(text: str, value: list[float], unit_text: str) -> None:
    """Precedence, signs, brackets, functions and units as in school (source: common practice, no source)."""
    expression = parse_expression(text, NAMES)
    assert expression.dimension == unit(unit_text).dimension
    # 1e-13: a few float roundings
    np.testing.assert_allclose(expression.evaluate(COLUMNS), value, rtol=1e-13, atol=0)


@pytest.mark.parametrize(
    ("text", "says", "offset"),
    [
        ("", "expected a number or a setting", 0),
        ("2*", "expected a number or a setting", 2),
        ("2 split", r"write \"2\*split\"", 2),
        ("splt", 'did you mean "split"', 0),
        ("hold + 3", "same dimension", 5),
        ("hold + depth", "same dimension", 5),
        ("2**8", "expected a number or a setting", 2),
        ("(hold", r'expected "\)"', 5),
        ("hold)", "expected [+]", 4),
        ("hold hold", "expected [+]", 5),
        ("5 parsec", "unknown unit", 2),
        ("5 us/hold", "put spaces around", 2),
        ("sqrt(hold)", "has no unit", 0),
        ("sqrt(2, 3)", "takes 1 to 1", 0),
        ("exp(2)", "no function", 0),
        ("hold.real", "no meaning", 4),
        ("hold[0]", "no meaning", 4),
        ("hold if 1", "expected [+]", 5),
        ("__import__('os')", "no meaning", 11),
        ("lambda: 1", "no meaning", 6),
        ("1,5 us", "decimal point", 1),
        ("1e999", "too large|expected", 0),
        ("(" * 60 + "1" + ")" * 60, "nested", 33),
        ("-" * 100 + "1", "nested", 33),
        ("1+" * LONGEST + "1", "at most", 0),
    ],
)
def test_what_is_not_arithmetic_is_refused_at_its_place(text: str, says: str, offset: int) -> None:
    """Every refusal says what was found and at which character."""
    with pytest.raises(ExpressionError, match=says) as caught:
        parse_expression(text, NAMES)
    assert caught.value.offset == offset


trees = st.recursive(
    st.one_of(st.integers(0, 99).map(str), st.sampled_from(["a", "b"])),
    lambda inner: st.one_of(
        st.tuples(inner, st.sampled_from("+-*/"), inner).map(lambda t: f"({t[0]} {t[1]} {t[2]})"),
        st.tuples(inner, st.sampled_from("+-*/"), inner).map(lambda t: f"{t[0]}{t[1]}{t[2]}"),
        inner.map(lambda t: f"-({t})"),
        st.tuples(inner, inner).map(lambda t: f"max({t[0]}, {t[1]})"),
    ),
    max_leaves=8,
)


@given(trees.filter(lambda text: len(text) <= LONGEST), st.floats(-10, 10), st.floats(-10, 10))
def test_values_agree_with_python(text: str, a: float, b: float) -> None:
    """Our grammar gives what Python's own gives for the same text: an independent parser and evaluator."""
    none = unit("").dimension
    ours = parse_expression(text, {"a": none, "b": none}).evaluate({"a": np.array([a]), "b": np.array([b])})[0]
    with np.errstate(all="ignore"), suppress(ZeroDivisionError):
        theirs: Any = np.nan
        theirs = eval(text, {"a": np.float64(a), "b": np.float64(b), "max": np.maximum})
    if not np.isfinite(theirs):
        return
    # the order of operations is the same, so only the last bits may differ
    assert math.isclose(float(ours), float(theirs), rel_tol=1e-12, abs_tol=1e-300) or not np.isfinite(ours)


@given(st.text(alphabet="abshold+-*/() .,0123456789eus%^'\"_[]", max_size=80))
def test_any_text_parses_or_is_refused(text: str) -> None:
    """No text raises anything but ExpressionError."""
    with suppress(ExpressionError):
        parse_expression(text, NAMES)
