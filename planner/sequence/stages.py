"""The `stages` of a sequence file."""

from collections.abc import Mapping

from planner.quantities import PLAIN, Dimension, describe, unit
from planner.sequence.expression import Expression, ExpressionError, parse_expression
from planner.sequence.model import Pulse, Ramp, Stage
from planner.sequence.nodes import Node, show

MOST_STAGES = 200
MOST_PULSES = 200
TIME = unit("s").dimension


def read_stages(node: Node | None, dimensions: Mapping[str, Dimension]) -> tuple[Stage, ...]:
    """All stages; `dimensions` are those of the settings that arithmetic may use."""
    if node is None:
        return ()
    children = node.items("stages", MOST_STAGES)
    if not children and isinstance(node.value, list):
        node.problem("there is no stage", "each stage starts with [[stages]]")
    stages: list[Stage] = []
    names: dict[str, None] = {}
    for child in children:
        stage = _stage(child, dimensions, names)
        if stage is not None:
            stages.append(stage)
    return tuple(stages)


def _stage(node: Node, dimensions: Mapping[str, Dimension], names: dict[str, None]) -> Stage | None:
    fields = node.fields("stages[]")
    name_node, lasts_node = fields.get("name"), fields.get("lasts")
    name = name_node.text() if name_node else None
    if name_node and name is not None:
        if not name.strip() or name in names:
            name_node.problem("expected a name that no other stage has")
        names[name] = None
    lasts = read_expression(lasts_node, dimensions, TIME) if lasts_node else None
    levels, ramps, pulses = _levels(fields.get("levels"), dimensions), [], []
    for line, child in _named(fields.get("ramps"), "lines"):
        ramp = _ramp(line, child, dimensions)
        if ramp is not None:
            ramps.append(ramp)
        if line in levels:
            child.problem(f'line "{line}" has a level and a ramp in this stage', "keep one of them")
    pulses_node = fields.get("pulses")
    for child in pulses_node.items("pulses", MOST_PULSES) if pulses_node else []:
        pulse = _pulse(child, dimensions)
        if pulse is not None:
            pulses.append(pulse)
            if any(ramp.line == pulse.line for ramp in ramps):
                child.problem(f'line "{pulse.line}" has a ramp and a pulse in this stage', "split the stage")
    if name is None or lasts is None:
        return None
    return Stage(name=name, lasts=lasts, levels=levels, ramps=tuple(ramps), pulses=tuple(pulses))


def _named(node: Node | None, what: str) -> list[tuple[str, Node]]:
    return list(node.named(what).items()) if node else []


def _levels(node: Node | None, dimensions: Mapping[str, Dimension]) -> dict[str, Expression]:
    found = {}
    for line, child in _named(node, "lines"):
        level = read_expression(child, dimensions, None)
        if level is not None:
            found[line] = level
    return found


def _ramp(line: str, node: Node, dimensions: Mapping[str, Dimension]) -> Ramp | None:
    fields = node.fields("stages[].ramps.<line>")
    start_node, end_node = fields.get("from"), fields.get("to")
    start = read_expression(start_node, dimensions, None) if start_node else None
    end = read_expression(end_node, dimensions, None) if end_node else None
    return Ramp(line=line, start=start, end=end) if start and end else None


def _pulse(node: Node, dimensions: Mapping[str, Dimension]) -> Pulse | None:
    fields = node.fields("stages[].pulses[]")
    line_node, level_node = fields.get("line"), fields.get("level")
    times = [(child, read_expression(child, dimensions, TIME)) for child in map(fields.get, ("at", "lasts")) if child]
    line = line_node.text() if line_node else None
    level = read_expression(level_node, dimensions, None) if level_node else None
    if line is None or level is None or len(times) != 2:
        return None
    at, lasts = times[0][1], times[1][1]
    return Pulse(line=line, at=at, lasts=lasts, level=level) if at and lasts else None


def read_expression(node: Node, dimensions: Mapping[str, Dimension], wanted: Dimension | None) -> Expression | None:
    """Arithmetic of the dimension `wanted` (None: any; the rig file's line decides when compiling)."""
    if isinstance(node.value, int | float) and not isinstance(node.value, bool):
        number = node.number()
        if number is None:
            return None
        if wanted is not None and wanted != PLAIN:
            node.problem(f"expected {_kind(wanted)}; found {show(node.value)} without a unit")
            return None
        return Expression.constant(number, PLAIN)
    if not isinstance(node.value, str):
        node.problem(f"expected a number or arithmetic in quotation marks; found {show(node.value)}")
        return None
    try:
        expression = parse_expression(node.value, dimensions)
    except ExpressionError as wrong:
        if wrong.name in node.document.unreadable:
            return None
        node.problem(str(wrong), offset=wrong.offset)
        return None
    if wanted is not None and expression.dimension != wanted:
        node.problem(f"expected {_kind(wanted)}; {show(node.value)} is {describe(expression.dimension)}")
        return None
    return expression


def _kind(wanted: Dimension) -> str:
    return 'a time, such as "25 ms"' if wanted == TIME else describe(wanted)
