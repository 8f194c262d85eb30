"""The `sweeps` and the readout phases of a sequence file."""

from dataclasses import replace
from math import pi
from typing import Any

from planner.quantities import unit
from planner.sequence.beliefs import read_belief
from planner.sequence.model import Setting, Sweep
from planner.sequence.nodes import Fields, Node, show

MOST_VALUES = 200_000  # in all sweeps of a file together; crossed sweeps of a few hundred values make millions of shots
MOST_SWEEPS = 12
MOST_PHASES = 360
TURN = 2.0 * pi
FORMS = (
    {"values"},
    {"from", "to", "count"},
    {"from", "to", "step"},
    {"around", "span", "count"},
)


def read_sweeps(node: Node | None, settings: dict[str, Setting], roles: dict[str, str]) -> tuple[Sweep, ...]:
    """Sweeps in the order of the file; those with `with` join the sweep that they name."""
    if node is None:
        return ()
    named = node.named("sweeps")
    if len(named) > MOST_SWEEPS:
        node.problem(f"at most {MOST_SWEEPS} sweeps; found {len(named)}")
        return ()
    columns: dict[str, tuple[float, ...]] = {}
    counts: dict[str, tuple[int, ...]] = {}
    offsets: dict[str, tuple[float, float]] = {}
    leaders: dict[str, Node] = {}
    for name, child in named.items():
        if name not in settings:
            child.unknown(settings, "setting")
            continue
        if name == roles.get("readout"):
            child.problem("the readout phase is not swept", "list its values under [fringe] phases")
            continue
        values, leader = _sweep(child, settings[name])
        if leader is not None:
            leaders[name] = leader
        listed = _packets(child, values, leader)
        if listed:
            counts[name] = listed
        if values is not None:
            columns[name] = values
        offset = None if isinstance(child.value, list) else child.fields("sweeps.<setting>").get("offset")
        stands = read_belief(offset, settings[name].unit) if offset else None
        if stands is not None:
            offsets[name] = stands
        if sum(map(len, columns.values())) > MOST_VALUES:  # stop before more is built
            child.problem(f"the sweeps have more than {MOST_VALUES:,} values together")
            return ()
    return tuple(
        replace(sweep, offsets={name: offsets[name] for name in sweep.values if name in offsets})
        for sweep in _joined(columns, counts, leaders, named)
    )


def _packets(node: Node, values: tuple[float, ...] | None, leader: Node | None) -> tuple[int, ...]:
    """Packets of each value, as listed; () where none are or after a problem."""
    if isinstance(node.value, list) or values is None:
        return ()
    listed = node.fields("sweeps.<setting>").get("packets")
    if not listed:
        return ()
    if leader is not None:
        listed.problem("a sweep that moves with another has that one's packets", "list them at the other sweep")
        return ()
    found = [child.whole(1, MOST_VALUES) for child in listed.items("packets", MOST_VALUES)]
    if len(found) != len(values):
        listed.problem(f"{len(values)} values and {len(found)} numbers of packets: one for each value is needed")
        return ()
    return tuple(count for count in found if count is not None) if None not in found else ()


def _joined(
    columns: dict[str, tuple[float, ...]],
    counts: dict[str, tuple[int, ...]],
    leaders: dict[str, Node],
    named: dict[str, Node],
) -> tuple[Sweep, ...]:
    groups = {name: {name: values} for name, values in columns.items() if name not in leaders}
    for name, node in leaders.items():
        leader = node.choice([other for other in named if other not in leaders], "sweep")
        if leader is None or leader not in groups or name not in columns:
            continue
        if len(columns[name]) != len(columns[leader]):
            node.problem(
                f'"{name}" has {len(columns[name])} values and "{leader}" has {len(columns[leader])}; '
                "sweeps that move together need as many"
            )
            continue
        groups[leader][name] = columns[name]
    for name, values in groups.items():
        _refuse_twins(named[name], list(zip(*values.values(), strict=True)))
    return tuple(Sweep(values=values, packets=counts.get(name, ())) for name, values in groups.items())


def _refuse_twins(node: Node, points: list[tuple[float, ...]]) -> None:
    """The same point twice in one sweep would be two cells that are one."""
    seen: set[tuple[float, ...]] = set()
    for number, point in enumerate(points):
        if point in seen:
            written = node if isinstance(node.value, list) else node.child("values", None)
            written.child(number, None).problem("this value stands twice", "more shots at one value are repeats")
            return
        seen.add(point)


def _sweep(node: Node, setting: Setting) -> tuple[tuple[float, ...] | None, Node | None]:
    """The values in SI (None after a problem) and the node of `with`."""
    if isinstance(node.value, list):
        return _listed(node, setting), None
    fields = node.fields("sweeps.<setting>")
    leader = fields.get("with")
    given = {key for key in ("values", "from", "to", "around", "span", "count", "step") if fields.has(key)}
    if not fields.usable:
        return None, leader
    if given not in FORMS:
        fields.problem(
            f"these keys do not make a sweep: {', '.join(sorted(given)) or 'none'}",
            "write values; or from, to and count (or step); or around, span and count",
        )
        return None, leader
    spacing_node = fields.get("spacing")
    spacing = spacing_node.choice(("linear", "log"), "spacing") if spacing_node else "linear"
    if spacing == "log" and given != {"from", "to", "count"} and spacing_node:
        spacing_node.problem('spacing = "log" goes with from, to and count')
        return None, leader
    values_node = fields.get("values")
    values = _listed(values_node, setting) if values_node else _spaced(fields, setting, spacing == "log")
    if values is not None and values_node is None and not _inside(values, setting):
        fields.problem(f'the sweep leaves the range of "{setting.name}"', _range_text(setting))
        return None, leader
    return values, leader


def _listed(node: Node, setting: Setting) -> tuple[float, ...] | None:
    children = node.items("values", MOST_VALUES)
    if not children:
        if isinstance(node.value, list):
            node.problem("expected at least one value")
        return None
    values: list[float] = []
    for child in children:
        value = child.quantity(setting.unit, bare=True)
        if value is None:
            continue
        if not _inside((value,), setting):
            child.problem(f'{show(child.value)} is outside the range of "{setting.name}"', _range_text(setting))
        else:
            values.append(value)
    return tuple(values) if len(values) == len(children) else None


def _spaced(fields: Fields, setting: Setting, log: bool) -> tuple[float, ...] | None:
    numbers: dict[str, Any] = {}
    for key in ("from", "to", "around", "span", "step"):
        node = fields.get(key)
        if node:
            numbers[key] = node.quantity(setting.unit, bare=True)
    count_node = fields.get("count")
    if count_node:
        numbers["count"] = count_node.whole(2, MOST_VALUES)
    if None in numbers.values():
        return None
    if "around" in numbers:
        half = numbers["span"] / 2
        first, last = numbers["around"] - half, numbers["around"] + half
    else:
        first, last = numbers["from"], numbers["to"]
    if first == last:
        fields.problem("the sweep starts and ends at the same value")
        return None
    if "step" in numbers:
        return _stepped(fields, first, last, numbers["step"])
    if log and (first <= 0 or last <= 0):
        fields.problem('spacing = "log" needs values above zero')
        return None
    count = numbers["count"]
    if log:
        inner = [first * (last / first) ** (i / (count - 1)) for i in range(1, count - 1)]
    else:
        inner = [first + (last - first) * i / (count - 1) for i in range(1, count - 1)]
    return (first, *inner, last)


def _stepped(fields: Fields, first: float, last: float, step: float) -> tuple[float, ...] | None:
    if step == 0 or (last - first) * step < 0:
        fields.problem("the step does not lead from the first value to the last", "change its sign or its size")
        return None
    steps = (last - first) / step
    if steps > MOST_VALUES:
        fields.problem(f"this sweep has {steps:.3g} values; at most {MOST_VALUES:,} are allowed")
        return None
    whole = int(steps + 1e-9)  # 0.1 + 0.1 + ... misses its end by rounding
    return tuple(first + step * i for i in range(whole + 1))


def _inside(values: tuple[float, ...], setting: Setting) -> bool:
    """Within the range, ends included, but for rounding in the twelfth digit."""
    slack = 1e-12 * max(abs(setting.low), abs(setting.high)) if setting.high != float("inf") else 0.0
    return setting.low - slack <= min(values) and max(values) <= setting.high + slack


def _range_text(setting: Setting) -> str:
    factor = unit(setting.unit).factor
    return f"the range is {setting.low / factor:g} to {setting.high / factor:g} {setting.unit}".strip()


def read_phases(node: Node, readout: Setting | None) -> tuple[float, ...] | None:
    """Readout phases in [0, 2 pi); bare numbers count in the readout's unit."""
    children = node.items("phases", MOST_PHASES)
    if not children:
        if isinstance(node.value, list):
            node.problem("expected at least one phase")
        return None
    unit_text = readout.unit if readout else "rad"
    phases: list[float] = []
    for child in children:
        value = child.quantity(unit_text, bare=True)
        if value is None:
            return None
        phase = value % TURN
        if any(abs(phase - other) < 1e-9 or abs(abs(phase - other) - TURN) < 1e-9 for other in phases):
            child.problem(f"{show(child.value)} is a phase that stands here already (modulo one turn)")
            return None
        phases.append(phase)
    return tuple(phases)
