"""Sequence file to `Sequence`: every problem of the file at once, each with its place."""

from pathlib import Path as FilePath

from planner.quantities import UNITS, Dimension, unit
from planner.sequence.aims import (
    read_checks,
    read_cuts,
    read_drift,
    read_expected,
    read_goal,
    read_knobs,
    read_memory,
    read_watch,
)
from planner.sequence.atom_names import ATOMS
from planner.sequence.expression import FUNCTIONS
from planner.sequence.keys import SEQUENCE
from planner.sequence.model import ROLES, Expected, Fringe, GoalSpec, Memory, Sequence, Setting, Sweep, Switch
from planner.sequence.nodes import Document, Fields, Node, parse_document, read_text, show, where
from planner.sequence.stages import read_stages
from planner.sequence.sweeps import read_phases, read_sweeps

VERSION = 1
MOST_SHOTS = 4_000_000  # a year of nights of one-second shots is 1e7; a night has thousands
MOST_SWITCHES = 6
MOST_SETTINGS = 200
ROLE_UNITS = {"hold": "s", "readout": "rad", "depth": "Er", "separation": "m", "split": "s"}


def read_sequence(path: str | FilePath) -> Sequence:
    """Read and check a sequence file.

    Raises:
        ProblemsFound: with every problem of the file.
    """
    return parse_sequence(read_text(str(path), "sequence file"), str(path))


def parse_sequence(text: str, file: str) -> Sequence:
    """Check the text of a sequence file; `file` is the name that problems carry.

    Raises:
        ProblemsFound: with every problem of the text.
    """
    document = parse_document(text, file, SEQUENCE)
    sequence = _read(document, text)
    document.finish()
    return sequence


def _read(document: Document, text: str) -> Sequence:
    """The sequence as far as it could be read; with problems noted it is not to be used."""
    fields = document.root().fields("")
    read_version(fields, "nightfringe", VERSION, "a sequence file")
    settings = _settings(fields.get("settings"))
    switches = _switches(fields.get("switches"))
    dimensions = {name: unit(setting.unit).dimension for name, setting in settings.items()}
    roles = _roles(fields.get("roles"), settings, dimensions)
    stages = read_stages(fields.get("stages"), dimensions)
    sweeps = read_sweeps(fields.get("sweeps"), settings, roles)
    fringe = _fringe(fields.get("fringe"), settings, roles)
    tolerance = fields.get("tick_tolerance")
    drift = read_drift(fields.get("drift"))
    sequence = Sequence(
        title=_line(fields.get("title")),
        text=text,
        file=document.file,
        atom=_atom(fields.get("atom")),
        roles=roles,
        settings=settings,
        switches=switches,
        stages=stages,
        sweeps=sweeps,
        fringe=fringe or Fringe(phases_rad=(0.0,), repeats=1),
        goal=read_goal(fields.get("goal"), switches) or GoalSpec(kind="curve"),
        drift=drift,
        memory=read_memory(fields.get("memory")) or Memory(),
        expected=read_expected(fields.get("expected")) or Expected(),
        checks=read_checks(fields.get("checks"), settings),
        cuts=read_cuts(fields.get("cuts")),
        watch=read_watch(fields.get("watch")),
        knobs=read_knobs(fields.get("knobs"), settings),
        rig=_line(fields.get("rig")),
        tick_tolerance_rad=(tolerance.quantity("rad", above=0.0) if tolerance else None) or Sequence.tick_tolerance_rad,
        places={where(path): document.positions.line_column(at) for path, at in document.positions.values.items()},
    )
    if not document.problems:
        _unused(document, sequence)
    if "hold" in roles and not document.problems and not any(roles["hold"] in s.lasts.names for s in stages):
        fields.known["roles"].fields("roles").known["hold"].problem(
            "the hold setting is in no stage's length: every shot would hold as long",
            'use it: lasts = "hold"',
        )
    _too_many(document, sweeps, fringe, switches)
    return sequence


def read_version(fields: Fields, key: str, version: int, what: str) -> None:
    """Note a problem unless the version stamp is the one this program reads."""
    node = fields.get(key)
    if node is not None and (isinstance(node.value, bool) or node.value != version):
        node.problem(
            f"this program reads version {version} of {what}; found {show(node.value)}", f"write: {key} = {version}"
        )


def _line(node: Node | None) -> str:
    """One non-empty line of text, or "" after noting a problem."""
    value = node.text() if node else None
    if node is None or value is None:
        return ""
    if not value.strip() or len(value.splitlines()) != 1:
        node.problem("expected one line of text that is not empty")
        return ""
    return value.strip()


def _atom(node: Node | None) -> str:
    return (node.choice(ATOMS, "atom") if node else None) or ""


def _settings(node: Node | None) -> dict[str, Setting]:
    found: dict[str, Setting] = {}
    if node is None:
        return found
    named = node.named("settings")
    if len(named) > MOST_SETTINGS:
        node.problem(f"at most {MOST_SETTINGS} settings; found {len(named)}")
        return found
    for name, child in named.items():
        if name in FUNCTIONS or name in UNITS:
            child.problem(f'a setting cannot be called "{name}": arithmetic has a unit or function of that name')
            continue
        setting = _setting(name, child)
        if setting is not None:
            found[name] = setting
        else:
            node.document.unreadable.add(name)
    return found


def _setting(name: str, node: Node) -> Setting | None:
    fields = node.fields("settings.<name>")
    unit_node, rest_node, range_node = fields.get("unit"), fields.get("rest"), fields.get("range")
    unit_text = unit_node.unit_text() if unit_node else None
    wraps_node, settle_node = fields.get("wraps"), fields.get("settle")
    wraps = bool(wraps_node and wraps_node.flag())
    settle = settle_node.quantity("s", low=0.0) if settle_node else 0.0
    if unit_text is None:
        return None
    rest = rest_node.quantity(unit_text, bare=True) if rest_node else None
    bounds = range_node.pair(unit_text, bare=True) if range_node else (float("-inf"), float("inf"))
    if wraps and unit(unit_text).dimension != unit("rad").dimension:
        fields.problem(f'only an angle wraps; the unit here is "{unit_text}"', 'use "deg", "rad" or "turn"')
    if range_node is None and not wraps and fields.usable:
        fields.problem('"range" is missing: lowest and highest value', "or wraps = true for a phase")
    if rest is None or bounds is None:
        return None
    if rest_node and not bounds[0] <= rest <= bounds[1]:
        rest_node.problem(f"the resting value {show(rest_node.value)} lies outside the range")
    return Setting(
        name=name, unit=unit_text, rest=rest, low=bounds[0], high=bounds[1], wraps=wraps, settle_s=settle or 0.0
    )


def _switches(node: Node | None) -> dict[str, Switch]:
    found: dict[str, Switch] = {}
    if node is None:
        return found
    named = node.named("switches")
    if len(named) > MOST_SWITCHES:
        node.problem(f"at most {MOST_SWITCHES} switches; found {len(named)}")
        return found
    for name, child in named.items():
        fields = child.fields("switches.<name>")
        states_node, settle_node, dwell_node = fields.get("states"), fields.get("settle"), fields.get("dwell")
        settle = settle_node.quantity("s", low=0.0) if settle_node else 0.0
        dwell = dwell_node.quantity("s", low=0.0) if dwell_node else 0.0
        states = [state.text() for state in states_node.items("states", 16)] if states_node else []
        if states_node and (len(states) != 2 or None in states or states[0] == states[1] or "" in states):
            states_node.problem('expected two different names, such as ["near", "far"]')
        elif states_node:
            found[name] = Switch(
                name=name, states=(str(states[0]), str(states[1])), settle_s=settle or 0.0, dwell_s=dwell or 0.0
            )
    return found


def _roles(node: Node | None, settings: dict[str, Setting], dimensions: dict[str, Dimension]) -> dict[str, str]:
    found: dict[str, str] = {}
    if node is None:
        return found
    fields = node.fields("roles")
    for role in ROLES:
        child = fields.get(role)
        name = child.choice(list(settings), "setting") if child else None
        if child is None or name is None:
            continue
        if dimensions[name] != unit(ROLE_UNITS[role]).dimension:
            child.problem(
                f'the {role} needs a setting with a unit such as "{ROLE_UNITS[role]}"; '
                f'"{name}" has "{settings[name].unit}"'
            )
        elif name in found.values():
            child.problem(f'"{name}" already plays another part')
        else:
            found[role] = name
    return found


def _fringe(node: Node | None, settings: dict[str, Setting], roles: dict[str, str]) -> Fringe | None:
    if node is None:
        return None
    fields = node.fields("fringe")
    phases_node, repeats_node = fields.get("phases"), fields.get("repeats")
    readout = settings[roles["readout"]] if "readout" in roles else None
    phases = read_phases(phases_node, readout) if phases_node else None
    repeats = repeats_node.whole(1, MOST_SHOTS) if repeats_node else None
    return Fringe(phases_rad=phases, repeats=repeats) if phases and repeats else None


def _unused(document: Document, sequence: Sequence) -> None:
    """A setting that nothing uses is a slip of the pen: the shot does not do what its author thinks."""
    used = set(sequence.roles.values()) | {knob.setting for knob in sequence.knobs}
    used |= {name for sweep in sequence.sweeps for name in sweep.values}
    used |= {name for check in sequence.checks for name in check.settings}
    used |= {name for stage in sequence.stages for expression in stage.expressions() for name in expression.names}
    for name in sequence.settings:
        if name not in used:
            document.problem(
                ("settings", name),
                f'nothing uses the setting "{name}": no stage, sweep, role, check or knob',
                "use it in a stage, or take it out",
                key=True,
            )


def _too_many(
    document: Document, sweeps: tuple[Sweep, ...], fringe: Fringe | None, switches: dict[str, Switch]
) -> None:
    """Refuse a plan of too many shots by its counts alone: nothing of that size is built."""
    shots = 2 ** len(switches) * (len(fringe.phases_rad) * fringe.repeats if fringe else 1)
    for sweep in sweeps:
        shots *= sum(sweep.packets) or len(sweep)
    if shots > MOST_SHOTS:
        document.problem(
            ("fringe", "repeats"),
            f"this asks for {shots:,} shots; at most {MOST_SHOTS:,} are planned at once",
            "fewer repeats, or fewer values in the sweeps",
        )
