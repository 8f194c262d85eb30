"""Strict JSON for the rig link: what may go over the wire, and what is refused before anyone believes it.

Standard parsers are more forgiving than a link between a program and a machine should be: Python's takes `NaN`, keeps
the last of two equal keys and turns 1e999 into infinity. Here each of these is an error. JSON as in RFC 8259.
"""

import json
import math
from collections.abc import Sequence
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

LARGEST_REQUEST = 4 * 2**20  # bytes; a timeline of a minute with tens of thousands of edges has about one megabyte
LARGEST_ANSWER = 64 * 2**20  # bytes; some ten thousand results in one reconciliation
LARGEST_INTEGER = 2**63 - 1  # what other languages can hold
SHOWN = 400  # characters of a bad message that are kept with its error

Message = TypeVar("Message", bound=BaseModel)


class MessageError(ValueError):
    """A text that is not a message of the rig link; the words say where and why."""


def _pairs(pairs: Sequence[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        seen: set[str] = set()
        twice = next(name for name, _ in pairs if name in seen or seen.add(name))  # type: ignore[func-returns-value]
        raise MessageError(f"the name {twice!r} stands twice in one object")
    return found


def _refuse_constant(word: str) -> float:
    raise MessageError(f"{word} is not a number; what was not measured is null")


def _finite(text: str) -> float:
    value = float(text)
    if not math.isfinite(value):
        raise MessageError(f"{text} is too large for a number")
    return value


def _bounded(text: str) -> int:
    if len(text) > 20 or abs(value := int(text)) > LARGEST_INTEGER:
        raise MessageError(f"the integer {text[:24]} has more than 63 bits")
    return value


def load(raw: bytes) -> Any:
    """The JSON value in `raw`; raises MessageError where RFC 8259 or the rules at the top of this module are broken."""
    try:
        return json.loads(
            raw.decode("utf-8"),
            object_pairs_hook=_pairs,
            parse_constant=_refuse_constant,
            parse_float=_finite,
            parse_int=_bounded,
        )
    except MessageError:
        raise
    except UnicodeDecodeError as error:
        raise MessageError(f"not UTF-8 at byte {error.start}") from error
    except json.JSONDecodeError as error:
        raise MessageError(f"not JSON: {error.msg} at line {error.lineno} column {error.colno}") from error
    except RecursionError as error:
        raise MessageError("nested too deeply") from error


def read(model: type[Message], raw: bytes) -> Message:
    """The message of type `model` in `raw`; raises MessageError naming each field that is wrong."""
    load(raw)
    try:
        return model.model_validate_json(raw)
    except ValidationError as error:
        raise MessageError(explain(error)) from error


def explain(error: ValidationError) -> str:
    """Each problem of a validation error as "field: found, expected", at most five of them."""
    problems = error.errors(include_url=False, include_context=False)
    lines = []
    for problem in problems[:5]:
        where = ".".join(str(part) for part in problem["loc"]) or "the message"
        lines.append(f"{where}: {problem['msg']} (found {shorten(repr(problem['input']), 60)})")
    if len(problems) > 5:
        lines.append(f"and {len(problems) - 5} more")
    return "; ".join(lines)


def dump(value: Any) -> bytes:
    """Compact JSON, names in the order given."""
    return json.dumps(value, separators=(",", ":"), ensure_ascii=False, allow_nan=False).encode()


def canonical(value: Any) -> bytes:
    """JSON with sorted names and no spaces: equal values give equal bytes, for hashing."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False).encode()


def shorten(text: str, length: int = SHOWN) -> str:
    """`text`, cut in its middle to `length` characters."""
    if len(text) <= length:
        return text
    half = (length - 5) // 2
    return f"{text[:half]} ... {text[-half:]}"
