"""Strict JSON: what a forgiving parser would take is refused, with a reason."""

import json

import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.link.wire import MessageError, canonical, dump, load, shorten

values = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**63) + 1, 2**63 - 1)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=20,
)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (b'{"a": 1, "b": 2, "a": 3}', "'a' stands twice"),
        (b'{"deep": [{"x": 1, "x": 1}]}', "'x' stands twice"),
        (b"[NaN]", "NaN is not a number"),
        (b"[-Infinity]", "Infinity is not a number"),
        (b"[1e999]", "too large"),
        (b"[-1e999]", "too large"),
        (b"[9223372036854775808]", "63 bits"),
        (b"[" + b"1" * 5000 + b"]", "63 bits"),
        (b"[1,", "not JSON"),
        (b"", "not JSON"),
        (b"{'a': 1}", "not JSON"),
        (b'{"a": 1} {"b": 2}', "not JSON"),
        (b"\xff\xfe", "not UTF-8 at byte 0"),
        (b"[" * 200_000, "nested too deeply"),
    ],
)
def test_bad_json_is_refused_with_a_reason(text: bytes, words: str) -> None:
    """Each thing that RFC 8259 forbids or leaves to luck is an error that names it."""
    with pytest.raises(MessageError, match=words):
        load(text)


@given(values)
def test_what_is_said_is_what_is_heard(value: object) -> None:
    """Every JSON value with finite numbers survives the wire."""
    # source: Python's own json module as the second opinion
    assert load(dump(value)) == value == json.loads(dump(value))


@given(st.dictionaries(st.text(max_size=8), values, max_size=6))
def test_canonical_bytes_do_not_depend_on_the_order_of_names(value: dict[str, object]) -> None:
    """The same object in another order of its names gives the same bytes, so a hash can be compared."""
    assert canonical(dict(reversed(value.items()))) == canonical(value)


@pytest.mark.parametrize("value", [float("nan"), float("inf")])
def test_we_never_say_not_a_number(value: float) -> None:
    """Our own side cannot send what it would refuse."""
    with pytest.raises(ValueError, match="not JSON compliant"):
        dump([value])


@given(st.text(max_size=900))
def test_a_shortened_text_keeps_both_ends(text: str) -> None:
    """What is kept of a bad answer is bounded and shows how it began and ended."""
    short = shorten(text, 100)
    assert len(short) <= 100
    assert short[:40] == text[:40]
    assert short[-40:] == text[-40:]
