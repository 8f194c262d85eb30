"""The stand-in's profile: a TOML file that says what the simulated instrument does with a shot.

Read with the same care as a sequence: every mistake at once, with its place.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from planner.errors import QuantityError
from planner.link.stand_in.keys import (
    BOUNDED,
    MOST_WAVES,
    NUMBERS,
    QUANTITIES,
    READING,
    RHYTHM,
    SCHEMA,
    WAVE,
    Number,
)
from planner.physics.atoms import ATOMS
from planner.quantities import from_unit, parse_quantity
from planner.sequence.nodes import Document, Fields, Node, parse_document, read_text, show

VERSION = 1


@dataclass(frozen=True, kw_only=True)
class ProfileSetting:
    """A setting that the stand-in accepts; low and high in its unit, None without limits."""

    unit: str
    low: float | None
    high: float | None
    plays: str | None


@dataclass(frozen=True, kw_only=True)
class Reading:
    """A logged reading, in its own unit."""

    unit: str
    mean: float
    walk: float
    noise: float


@dataclass(frozen=True, kw_only=True)
class Wave:
    """One wave of the tide: amplitude cos(2 pi t / period + phase), t from where the drifts begin."""

    period_s: float
    amplitude: float  # m/s^2
    phase_rad: float


@dataclass(frozen=True, kw_only=True)
class Profile:
    """A checked profile. `numbers` maps "section.key" to SI values; `follows` are the switches of the signal."""

    name: str
    text: str
    atom: str
    wavelength_m: float
    settings: Mapping[str, ProfileSetting]
    rest: Mapping[str, float]  # model quantity -> SI
    switches: Mapping[str, tuple[str, str]]
    readings: Mapping[str, Reading]
    numbers: Mapping[str, float]
    follows: tuple[str, ...]
    rhythm_s: float
    rhythm_phase_rad: float
    rhythm_offset: float
    tide: tuple[Wave, ...]


DEFAULT_REST = {"hold": 1.0, "readout": 0.0, "depth": 9.0, "separation": 4e-6, "cooling": 0.4, "detuning": 0.0}


def read_profile(path: str | Path) -> Profile:
    """Read and check a profile file.

    Raises:
        ProblemsFound: with every problem of the file.
    """
    return parse_profile(read_text(str(path), "stand-in profile"), str(path))


def parse_profile(text: str, file: str) -> Profile:
    """Check the text of a profile; `file` is the name that problems carry.

    Raises:
        ProblemsFound: with every problem of the text.
    """
    document = parse_document(text, file, SCHEMA)
    fields = document.root().fields("")
    version = fields.get("nightfringe_stand_in")
    if version:
        version.whole(VERSION, VERSION)
    numbers: dict[str, float] = {"memory.fades": 60.0}
    inside = {section: fields.get(section) for section in NUMBERS}
    tables = {section: node.fields(section) for section, node in inside.items() if node}
    for section, keys in NUMBERS.items():
        found = _numbers(tables.get(section), keys)
        numbers |= {f"{section}.{key}": found.get(key, numbers.get(f"{section}.{key}", 0.0)) for key in keys}
    switches = _switches(fields.get("switches"))
    rhythm = _rhythm(tables.get("drift"))
    name, atom, wavelength = fields.get("name"), fields.get("atom"), fields.get("wavelength")
    profile = Profile(
        name=(_name(name) if name else None) or "stand-in",
        text=text,
        atom=(atom.choice(ATOMS, "atom") if atom else None) or ATOMS[0],
        wavelength_m=(wavelength.quantity("m", low=1e-7, high=1e-4) if wavelength else None) or 1e-6,
        settings=_settings(fields.get("settings"), document),
        rest=DEFAULT_REST | _rest(fields.get("rest")),
        switches=switches,
        readings=_readings(fields.get("readings")),
        numbers=numbers,
        follows=_follows(tables.get("signal"), switches),
        rhythm_s=rhythm.get("period", 1200.0),
        rhythm_phase_rad=rhythm.get("phase", 0.0),
        rhythm_offset=rhythm.get("offset", 0.0),
        tide=_tide(fields.get("tide")),
    )
    document.finish()
    return profile


def _number(node: Node | None, number: Number) -> float | None:
    return node.quantity(number.unit, low=number.low, high=number.high) if node else None


def _numbers(fields: Fields | None, keys: Mapping[str, Number]) -> dict[str, float]:
    """Those of `keys` that stand in a table, SI."""
    if fields is None:
        return {}
    values = {key: _number(fields.get(key), number) for key, number in keys.items()}
    return {key: value for key, value in values.items() if value is not None}


def _name(node: Node) -> str | None:
    name = node.text()
    if name is not None and not name.strip():
        node.problem("expected a name; found nothing between the quotation marks")
    return name


def _settings(node: Node | None, document: Document) -> dict[str, ProfileSetting]:
    found: dict[str, ProfileSetting] = {}
    played: dict[str, str] = {}
    for name, one in (node.named("settings") if node else {}).items():
        inside = one.fields("settings.<name>")
        unit_node, range_node, plays_node = inside.get("unit"), inside.get("range"), inside.get("plays")
        unit_text = unit_node.unit_text() if unit_node else None
        limits = _limits(range_node) if range_node else None
        plays = plays_node.choice(list(QUANTITIES), "quantity of the model") if plays_node else None
        if plays is not None and plays_node is not None:
            if plays in played:
                plays_node.problem(f'"{played[plays]}" plays {plays} already')
            played[plays] = name
            if unit_text is not None and unit_node is not None:
                _check_played(plays, unit_node, range_node, limits)
        if unit_text is not None:
            low, high = limits or (None, None)
            found[name] = ProfileSetting(unit=unit_text, low=low, high=high, plays=plays)
    if node is not None and not document.problems and "hold" not in played:
        node.problem('no setting plays "hold"', 'add plays = "hold" to the setting that is the hold time')
    return found


def _check_played(plays: str, unit_node: Node, range_node: Node | None, limits: tuple[float, float] | None) -> None:
    """A setting that plays a quantity has its dimension, and lets nothing through that the model cannot compute."""
    number, unit_text = QUANTITIES[plays], str(unit_node.value).strip()
    try:
        parse_quantity(f"1 {unit_text}".strip(), number.unit)
    except QuantityError:
        unit_node.problem(f"expected a unit of {plays}, such as {number.unit}; found {show(unit_node.value)}")
        return
    if range_node is None and plays in BOUNDED:
        unit_node.document.problem(
            unit_node.path[:-1],
            f'"range" is missing: a setting that plays {plays} needs one',
            f"within {number.low:g} to {number.high:g} {number.unit}",
            key=True,
        )
    if range_node is None or limits is None:
        return
    low, high = (from_unit(end, unit_text) for end in limits)
    if low < number.low or high > number.high:
        range_node.problem(
            f"expected {plays} within {number.low:g} to {number.high:g} {number.unit}; "
            f"found {low:g} to {high:g} {number.unit}"
        )


def _limits(node: Node) -> tuple[float, float] | None:
    if not isinstance(node.value, list) or len(node.value) != 2:
        node.problem(f"expected [lowest, highest]; found {show(node.value)}")
        return None
    low, high = (node.child(place, value).number() for place, value in enumerate(node.value))
    if low is None or high is None:
        return None
    if low >= high:
        node.problem(f"expected [lowest, highest], the lower one first; found [{low:g}, {high:g}]")
        return None
    return low, high


def _rest(node: Node | None) -> dict[str, float]:
    return _numbers(node.fields("rest"), QUANTITIES) if node else {}


def _switches(node: Node | None) -> dict[str, tuple[str, str]]:
    found: dict[str, tuple[str, str]] = {}
    for name, one in (node.named("switches") if node else {}).items():
        states = [item.text() for item in one.items("states", 2)]
        if len(states) == 2 and states[0] and states[1] and states[0] != states[1]:
            found[name] = (states[0], states[1])
        else:
            one.problem('expected the names of two states, such as ["near", "far"]')
    return found


def _follows(signal: Fields | None, switches: Mapping[str, tuple[str, str]]) -> tuple[str, ...]:
    node = signal.get("follows") if signal else None
    if node is None:
        return ()
    names = [item.choice(list(switches), "switch") for item in node.items("switches", 8)]
    known = tuple(name for name in names if name)
    if node.value == []:
        node.problem("expected at least one switch; found an empty list")
    if len(set(known)) < len(known):
        node.problem("expected each switch once; a switch that stands twice cancels itself")
    return known


def _rhythm(drift: Fields | None) -> dict[str, float]:
    node = drift.get("air_handling") if drift else None
    return _numbers(node.fields("drift.air_handling"), RHYTHM) if node else {}


def _tide(node: Node | None) -> tuple[Wave, ...]:
    named = node.named("waves") if node else {}
    if node is not None and len(named) > MOST_WAVES:
        node.problem(f"at most {MOST_WAVES} waves; found {len(named)}")
        return ()
    found = [_numbers(one.fields("tide.<name>"), WAVE) for one in named.values()]
    return tuple(
        Wave(period_s=wave["period"], amplitude=wave["amplitude"], phase_rad=wave.get("phase", 0.0))
        for wave in found
        if {"period", "amplitude"} <= set(wave)
    )


def _readings(node: Node | None) -> dict[str, Reading]:
    found = {}
    for name, one in (node.named("readings") if node else {}).items():
        inside = one.fields("readings.<name>")
        unit_node = inside.get("unit")
        unit_text = unit_node.unit_text() if unit_node else None
        values = {}
        for key, (low, _) in READING.items():
            value_node = inside.get(key)
            value = value_node.number() if value_node else None
            if value is not None and value < low and value_node is not None:
                value_node.problem(f"expected at least {low:g}; found {show(value_node.value)}")
            values[key] = value or 0.0
        found[name] = Reading(unit=unit_text or "", mean=values["mean"], walk=values["walk"], noise=values["noise"])
    return found
