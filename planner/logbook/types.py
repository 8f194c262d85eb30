"""Column types that SQLite's STRICT tables and PostgreSQL both take, and canonical JSON.

STRICT knows INTEGER, REAL, TEXT and BLOB alone. Times are whole microseconds since 1970 UTC: exact, sortable, and read
as one integer column.
"""

import json
from typing import Any

from sqlalchemy import BigInteger, Dialect, Double, Integer, LargeBinary, Text
from sqlalchemy.dialects.sqlite import REAL
from sqlalchemy.types import TypeDecorator, TypeEngine

Whole = BigInteger().with_variant(Integer(), "sqlite")
Real: TypeEngine[float] = Double().with_variant(REAL(), "sqlite")
Words = Text()
Bytes = LargeBinary()


def canonical_json(value: Any) -> str:
    """The one JSON text of a value: keys sorted, no spaces; not-a-number is refused (ValueError)."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


class JsonText(TypeDecorator[Any]):
    """A JSON value kept as canonical text."""

    impl = Text
    cache_ok = True

    def process_bind_param(self, value: Any, dialect: Dialect) -> str | None:
        return None if value is None else canonical_json(value)

    def process_result_value(self, value: str | None, dialect: Dialect) -> Any:
        return None if value is None else json.loads(value)
