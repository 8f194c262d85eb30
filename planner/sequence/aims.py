"""What a sequence file says of goal, drift, beliefs, checks, cuts, watch rules and knobs."""

from typing import Any, get_args

from planner.errors import QuantityError
from planner.quantities import parse_quantity, split_quantity
from planner.sequence.beliefs import read_belief
from planner.sequence.model import (
    DRIFT_KINDS,
    Check,
    Cut,
    Drift,
    Expected,
    Goal,
    GoalSpec,
    Knob,
    Memory,
    Setting,
    Sinusoid,
    Switch,
    WatchRule,
)
from planner.sequence.nodes import Fields, Node, show

LONGEST_NIGHT_H = 240.0
MOST_RULES = 50
MOST_RHYTHMS = 50
INFINITE = float("inf")
ACTIONS = ("pause", "check", "skip", "end", "tell")
# key in the file -> (name in GoalSpec.details, unit, lowest, highest)
DETAILS: dict[str, tuple[str, str, float, float]] = {
    "period": ("period_s", "s", 0.0, INFINITE),
    "depth": ("depth", "1", 0.0, 1.0),
    "plateau": ("plateau", "1", 0.0, 1.0),
    "risk": ("risk", "1", 0.0, 1.0),
    "significance": ("significance", "1", 0.0, 1.0),
    "scale_factor_error": ("scale_factor_error", "1", 0.0, 1.0),
    "signal": ("signal", "m/s^2", 0.0, INFINITE),
    "share": ("share", "1", 0.0, 1.0),
}
BELIEFS = {  # key in the file -> (field of Expected, unit, highest)
    "contrast": ("contrast", "1", 1.0),
    "coherence_constant": ("coherence_constant", "s Er um", INFINITE),
    "coherence": ("coherence_s", "s", INFINITE),
    "atoms": ("atoms", "1", INFINITE),
    "lifetime": ("lifetime_s", "s", INFINITE),
    "excess_noise": ("excess_noise", "1", INFINITE),
}
NEEDS_WANTED = ("signal", "budget")
NEEDS_DETAILS = {"revival": ("period", "depth"), "ladder": ("risk",)}  # without these the goal is no question


def read_goal(node: Node | None, switches: dict[str, Switch]) -> GoalSpec | None:
    if node is None:
        return None
    fields = node.fields("goal")
    kind_node, wanted_node, target_node = fields.get("kind"), fields.get("wanted"), fields.get("target")
    kind: Any = kind_node.choice(get_args(Goal), "kind of goal") if kind_node else None
    wanted = _wanted(wanted_node, switches) if wanted_node else ()
    if kind in NEEDS_WANTED and not wanted_node:
        fields.problem(f'"wanted" is missing: a goal of kind "{kind}" needs the switches that carry the signal')
    details_node = fields.get("details")
    given = details_node.value if details_node and isinstance(details_node.value, dict) else {}
    for key in NEEDS_DETAILS.get(kind, ()):
        if key not in given:
            fields.problem(f'"details" lacks "{key}": a goal of kind "{kind}" needs it', f"details = {{ {key} = ... }}")
    target, target_unit = _target(target_node) if target_node else (None, "")
    details = _details(details_node)
    hours = _hours(fields.get("hours"))
    if kind is None:
        return None
    return GoalSpec(kind=kind, wanted=wanted, target=target, target_unit=target_unit, hours=hours, details=details)


def _wanted(node: Node, switches: dict[str, Switch]) -> tuple[str, ...]:
    children = [node] if isinstance(node.value, str) else node.items("switches", 16)
    found: list[str] = []
    for child in children:
        name = child.choice(list(switches), "switch")
        if name is not None and name in found:
            child.problem(f'"{name}" stands twice')
        elif name is not None:
            found.append(name)
    return tuple(found)


def _target(node: Node) -> tuple[float | None, str]:
    if isinstance(node.value, str):
        try:
            value, unit_text = split_quantity(node.value)
            si = parse_quantity(node.value, unit_text)
        except QuantityError as wrong:
            node.problem(str(wrong))
            return None, ""
        if value <= 0:
            node.problem(f"expected an error above zero; found {show(node.value)}")
            return None, ""
        return si, unit_text
    return node.quantity("1", above=0.0), ""


def _hours(node: Node | None) -> float | None:
    if node is None:
        return None
    if isinstance(node.value, str):
        seconds = node.quantity("h", above=0.0, high=LONGEST_NIGHT_H * 3600.0)
        return None if seconds is None else seconds / 3600.0
    return node.quantity("1", above=0.0, high=LONGEST_NIGHT_H)


def _details(node: Node | None) -> dict[str, float]:
    if node is None:
        return {}
    fields = node.fields("goal.details")
    found = {}
    for key, (name, unit_text, low, high) in DETAILS.items():
        child = fields.get(key)
        value = child.quantity(unit_text, low=low, high=high) if child else None
        if value is not None:
            found[name] = value
    return found


def read_drift(node: Node | None) -> tuple[Drift, ...]:
    found: list[Drift] = []
    if node is None:
        return ()
    for kind, child in node.named("kinds of drift").items():
        if kind not in DRIFT_KINDS:
            child.unknown(DRIFT_KINDS, "kind of drift")
            continue
        fields = child.fields("drift.<kind>")
        unit_text = "m/s^2" if kind == "acceleration" else "1"
        wander_node, over_node, periods_node = fields.get("wander"), fields.get("wander_over"), fields.get("periods")
        wander = wander_node.quantity(unit_text, low=0.0) if wander_node else 0.0
        over = over_node.quantity("s", above=0.0) if over_node else Drift.wander_over_s
        rhythms = periods_node.items("periods", MOST_RHYTHMS) if periods_node else []
        sinusoids = [_sinusoid(rhythm, unit_text) for rhythm in rhythms]
        if not wander_node and not periods_node and fields.usable:
            fields.problem("neither wander nor periods is given: this drift says nothing")
        known: Any = kind
        found.append(
            Drift(
                kind=known,
                wander=wander or 0.0,
                wander_over_s=over or Drift.wander_over_s,
                sinusoids=tuple(one for one in sinusoids if one),
            )
        )
    return tuple(found)


def _sinusoid(node: Node, unit_text: str) -> Sinusoid | None:
    fields = node.fields("drift.<kind>.periods[]")
    period_node, amplitude_node = fields.get("period"), fields.get("amplitude")
    period = period_node.quantity("s", above=0.0) if period_node else None
    amplitude = amplitude_node.quantity(unit_text, low=0.0) if amplitude_node else None
    return Sinusoid(period_s=period, amplitude=amplitude) if period and amplitude is not None else None


def read_memory(node: Node | None) -> Memory | None:
    if node is None:
        return None
    fields = node.fields("memory")
    strength_node, fades_node, warm_node = fields.get("strength"), fields.get("fades"), fields.get("warm_up")
    strength = strength_node.quantity("1", low=-1.0, high=1.0) if strength_node else Memory.strength
    fades = fades_node.quantity("s", above=0.0) if fades_node else Memory.fades_s
    warm_up = warm_node.whole(0, 1000) if warm_node else Memory.warm_up
    if strength is None or fades is None or warm_up is None:
        return None
    return Memory(strength=strength, fades_s=fades, warm_up=warm_up)


def read_expected(node: Node | None) -> Expected | None:
    if node is None:
        return None
    fields = node.fields("expected")
    found: dict[str, Any] = {}
    for key, (name, unit_text, high) in BELIEFS.items():
        child = fields.get(key)
        if child:
            found[name] = read_belief(child, unit_text, high)
    return Expected(**found)


def read_checks(node: Node | None, settings: dict[str, Setting]) -> tuple[Check, ...]:
    found = []
    for name, child in _rules(node, "check shots").items():
        fields = child.fields("checks.<name>")
        every_node, settings_node, shots_node = fields.get("every"), fields.get("settings"), fields.get("shots")
        every = every_node.quantity("s", above=0.0) if every_node else None
        shots = shots_node.whole(1, 1000) if shots_node else 1
        values = {}
        for key, value_node in (settings_node.named("settings") if settings_node else {}).items():
            if key not in settings:
                value_node.unknown(settings, "setting")
                continue
            value = value_node.quantity(settings[key].unit, bare=True)
            if value is not None and not settings[key].low <= value <= settings[key].high:
                value_node.problem(f'{show(value_node.value)} is outside the range of "{key}"')
            elif value is not None:
                values[key] = value
        if every and shots:
            found.append(Check(name=name, every_s=every, settings=values, shots=shots))
    return tuple(found)


def _rules(node: Node | None, what: str) -> dict[str, Node]:
    if node is None:
        return {}
    named = node.named(what)
    if len(named) > MOST_RULES:
        node.problem(f"at most {MOST_RULES} {what}; found {len(named)}")
        return {}
    return named


def _bounds(fields: Fields) -> tuple[float, float] | None:
    """low and high of a cut or watch rule, plain numbers in the reading's own unit (or relative)."""
    low_node, high_node = fields.get("low"), fields.get("high")
    if not low_node and not high_node and fields.usable:
        fields.problem("neither low nor high is given: this rule says nothing")
    low = low_node.quantity("1") if low_node else -INFINITE
    high = high_node.quantity("1") if high_node else INFINITE
    if low is None or high is None:
        return None
    if low >= high:
        fields.problem("low must lie below high")
        return None
    return low, high


def read_cuts(node: Node | None) -> tuple[Cut, ...]:
    found = []
    for name, child in _rules(node, "cuts").items():
        fields = child.fields("cuts.<name>")
        reading_node, relative_node = fields.get("reading"), fields.get("relative")
        reading = reading_node.text() if reading_node else None
        relative = bool(relative_node and relative_node.flag())
        bounds = _bounds(fields)
        if reading and bounds:
            found.append(Cut(name=name, reading=reading, low=bounds[0], high=bounds[1], relative=relative))
    return tuple(found)


def read_watch(node: Node | None) -> tuple[WatchRule, ...]:
    found = []
    for name, child in _rules(node, "watch rules").items():
        fields = child.fields("watch.<name>")
        reading_node, shots_node, action_node = fields.get("reading"), fields.get("for_shots"), fields.get("action")
        reading = reading_node.text() if reading_node else None
        shots = shots_node.whole(1, 10_000) if shots_node else 3
        action: Any = action_node.choice(ACTIONS, "action") if action_node else None
        bounds = _bounds(fields)
        if reading and shots and action and bounds:
            found.append(
                WatchRule(name=name, reading=reading, low=bounds[0], high=bounds[1], for_shots=shots, action=action)
            )
    return tuple(found)


def read_knobs(node: Node | None, settings: dict[str, Setting]) -> tuple[Knob, ...]:
    found = []
    for name, child in _rules(node, "knobs").items():
        if name not in settings:
            child.unknown(settings, "setting")
            continue
        fields = child.fields("knobs.<setting>")
        range_node, spacing_node, whole_node = fields.get("range"), fields.get("spacing"), fields.get("whole")
        bounds = range_node.pair(settings[name].unit, bare=True) if range_node else None
        spacing = spacing_node.choice(("linear", "log"), "spacing") if spacing_node else "linear"
        whole = bool(whole_node and whole_node.flag())
        if range_node is None or bounds is None:
            continue
        if bounds[0] < settings[name].low or bounds[1] > settings[name].high:
            range_node.problem(f'the tuner\'s range leaves the range of "{name}"')
        if spacing == "log" and bounds[0] <= 0:
            range_node.problem('spacing = "log" needs a range above zero')
        found.append(Knob(setting=name, low=bounds[0], high=bounds[1], log=spacing == "log", whole=whole))
    return tuple(found)
