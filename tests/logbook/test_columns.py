"""The column container: the same content gives the same bytes, and nothing else is believed."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from planner.errors import LogbookDamaged
from planner.logbook.columns import pack, unpack

NAMES = st.text(min_size=1, max_size=12)
JSON = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**53), 2**53)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
    max_leaves=8,
)


@st.composite
def column_sets(draw: st.DrawFn) -> dict[str, Any]:
    rows = draw(st.integers(0, 20))
    names = draw(st.lists(NAMES, unique=True, max_size=5))
    kinds = st.sampled_from([np.float64, np.int64, np.int8])
    return {name: draw(hnp.arrays(draw(kinds), rows)) for name in names}


@settings(max_examples=100)
@given(columns=column_sets(), meta=st.dictionaries(st.text(), JSON, max_size=3))
def test_what_is_packed_comes_back(columns: dict[str, Any], meta: dict[str, Any]) -> None:
    """Columns keep their types and every bit, NaN included; meta comes back equal; bytes do not depend on order."""
    content = pack(columns, meta)
    assert content == pack(dict(reversed(columns.items())), meta)
    found, told = unpack(content)
    assert told == meta
    assert set(found) == set(columns)
    for name, column in columns.items():
        assert found[name].dtype == column.dtype
        assert found[name].tobytes() == column.tobytes()


@settings(max_examples=200)
@given(content=st.binary(max_size=80), tail=st.booleans())
def test_garbage_is_refused_by_name(content: bytes, tail: bool) -> None:
    """Random bytes, and a real container with a part missing, raise LogbookDamaged and nothing else."""
    whole = pack({"a": np.arange(5)}, {"b": 1})
    broken = whole[: 8 + len(content)] if tail else whole[:8] + content
    if broken != whole:
        with pytest.raises(LogbookDamaged):
            unpack(broken)


def test_columns_that_do_not_fit_together_are_refused() -> None:
    """Unequal lengths, a matrix and an unknown type are the caller's mistakes."""
    with pytest.raises(ValueError, match="equal length"):
        pack({"a": np.arange(2), "b": np.arange(3)}, {})
    with pytest.raises(ValueError, match="one-dimensional"):
        pack({"a": np.zeros((2, 2))}, {})
    with pytest.raises(ValueError, match="float32"):
        pack({"a": np.zeros(2, dtype=np.float32)}, {})
    with pytest.raises(ValueError, match="JSON"):
        pack({}, {"a": float("nan")})
