"""What somebody believes: a value and its uncertainty, as in "18 +- 3 s"."""

import re

from planner.errors import QuantityError
from planner.quantities import parse_quantity, split_quantity, unit
from planner.sequence.nodes import Node, show

INFINITE = float("inf")


def read_belief(node: Node, unit_text: str, high: float = INFINITE) -> tuple[float, float] | None:
    """ "0.60 +- 0.05" or "18 +- 3 s": a value above zero and one standard deviation, in SI."""
    parts = re.split(r"\+-|\+/-|±", node.value) if isinstance(node.value, str) else []
    if len(parts) != 2:
        example = f"18 +- 3 {unit_text}" if any(unit(unit_text).dimension) else "0.60 +- 0.05"
        node.problem(f'expected a value and its uncertainty, such as "{example}"; found {show(node.value)}')
        return None
    try:
        spread_number, spread_unit = split_quantity(parts[1])
        number, own_unit = split_quantity(parts[0])
        value = parse_quantity(f"{number!r} {own_unit or spread_unit}", unit_text)
        spread = parse_quantity(f"{spread_number!r} {spread_unit}", unit_text)
    except QuantityError as wrong:
        node.problem(str(wrong))
        return None
    if not 0 < value <= high or spread < 0:
        top = f" and at most {high:g}" if high < INFINITE else ""
        node.problem(f"expected a value above zero{top} and an uncertainty that is not negative")
        return None
    return value, spread
