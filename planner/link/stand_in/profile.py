"""The stand-in's profile: a TOML file that says what the simulated instrument does with a shot.

Read with the same care as a sequence: every mistake at once, with its place.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Literal, get_args

from planner.sequence.keys import Key, must
from planner.sequence.nodes import Document, Fields, Node, parse_document, read_text

VERSION = 1
Quantity = Literal["hold", "readout", "depth", "separation", "cooling", "detuning"]
QUANTITIES: tuple[str, ...] = get_args(Quantity)
UNIT_OF = {"hold": "s", "readout": "rad", "depth": "Er", "separation": "m", "cooling": "s", "detuning": "Hz"}

# section -> key -> (unit of the number, lowest, highest); "" is a plain number
NUMBERS: dict[str, dict[str, tuple[str, float, float]]] = {
    "signal": {"acceleration": ("m/s^2", -1.0, 1.0)},
    "cloud": {
        "atoms": ("", 0.0, 1e9),
        "atoms_lost_cooling": ("s", 1e-3, 1e6),
        "cold_share": ("", 0.0, 1.0),
        "temperature_falls": ("s", 1e-3, 1e3),
        "warmest": ("", 1.0, 1e3),
    },
    "contrast": {
        "short_hold": ("", 0.0, 1.0),
        "cold_constant": ("s Er m", 1e-9, 1.0),
        "warm_constant": ("s Er m", 1e-9, 1.0),
        "best_detuning": ("Hz", -1e9, 1e9),
        "detuning_width": ("Hz", 1.0, 1e9),
    },
    "loss": {
        "vacuum": ("s", 0.1, 1e6),
        "per_depth": ("1/s", 0.0, 10.0),
        "spill": ("1/s", 0.0, 100.0),
        "spill_depth": ("Er", 1e-3, 1e3),
    },
    "noise": {
        "phase": ("rad", 0.0, 10.0),
        "acceleration": ("m/s^2", 0.0, 1.0),
        "atoms": ("", 0.0, 1.0),
        "detection": ("", 0.0, 1e6),
        "background": ("", 0.0, 1e9),
        "saturates": ("", 1.0, 1e12),
    },
    "memory": {"strength": ("", -1.0, 1.0), "fades": ("s", 1e-3, 1e5)},
    "drift": {
        "phase": ("rad", 0.0, 100.0),
        "acceleration": ("m/s^2", 0.0, 1.0),
        "offset": ("", 0.0, 0.5),
        "contrast": ("", 0.0, 1.0),
        "atoms": ("", 0.0, 1.0),
    },
    "faults": {"unlocks_per_hour": ("", 0.0, 3600.0), "unlock_lasts": ("s", 0.0, 1e5), "outliers": ("", 0.0, 1.0)},
    "site": {"latitude": ("rad", -2.0, 2.0), "longitude": ("rad", -7.0, 7.0), "height": ("m", -500.0, 9000.0)},
}
MUST = ("cloud", "contrast", "loss", "noise")  # sections that a profile cannot do without


def _schema() -> dict[str, dict[str, Key]]:
    schema = {
        section: {key: Key("a number of the model") for key in keys} | {"about": Key("remarks")}
        for section, keys in NUMBERS.items()
    }
    for section in MUST:
        schema[section] |= {key: must("a number of the model") for key in NUMBERS[section]}
    schema[""] = {
        "nightfringe_stand_in": must("version of this language: 1"),
        "name": must("name of the simulated rig"),
        "about": Key("remarks"),
        "atom": must("isotope"),
        "wavelength": must("wavelength of the lattice light"),
        "settings": must("what the rig accepts"),
        "rest": Key("quantities that a sequence has no setting for"),
        "switches": Key("two-state reversals"),
        "readings": Key("what is logged with each shot"),
        **{section: (must if section in MUST else Key)("numbers of the model") for section in NUMBERS},
    }
    schema["settings.<name>"] = {
        "unit": must("unit at the rig"),
        "range": Key("lowest and highest value"),
        "plays": Key("the model's quantity that it moves"),
    }
    schema["rest"] = {name: Key("value") for name in QUANTITIES}
    schema["readings.<name>"] = {
        "unit": must("unit of the numbers"),
        "mean": must("mean"),
        "walk": Key("RMS of its walk over ten hours"),
        "noise": Key("RMS noise of one reading"),
    }
    schema["signal"]["follows"] = must("switches whose product it follows")
    schema["drift"]["air_handling"] = Key("a rhythm of the room")
    schema["drift.air_handling"] = {
        "period": must("period"),
        "phase": Key("amplitude of phase"),
        "offset": Key("amplitude of offset"),
    }
    return schema


SCHEMA = _schema()


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
    if version and version.whole(VERSION, VERSION) is None:
        pass  # noted: another version of the profile's language
    numbers = {f"{section}.{key}": value for section in NUMBERS for key, value in _numbers(fields, section).items()}
    switches = _switches(fields.get("switches"))
    signal = fields.get("signal")
    follows = _follows(signal.fields("signal").get("follows"), switches) if signal else ()
    rhythm = _rhythm(fields.get("drift"))
    name, atom_name, wavelength = fields.get("name"), fields.get("atom"), fields.get("wavelength")
    profile = Profile(
        name=(name.text() if name else None) or "stand-in",
        text=text,
        atom=_atom(atom_name),
        wavelength_m=(wavelength.quantity("m", low=1e-7, high=1e-4) if wavelength else None) or 1e-6,
        settings=_settings(fields.get("settings"), document),
        rest={**DEFAULT_REST, **_rest(fields.get("rest"))},
        switches=switches,
        readings=_readings(fields.get("readings")),
        numbers=numbers,
        follows=follows,
        rhythm_s=rhythm[0],
        rhythm_phase_rad=rhythm[1],
        rhythm_offset=rhythm[2],
    )
    document.finish()
    return profile


def _numbers(fields: Fields, section: str) -> dict[str, float]:
    node = fields.get(section)
    found = dict.fromkeys(NUMBERS[section], 0.0)
    if section == "memory":
        found["fades"] = 60.0
    if node is None:
        return found
    inside = node.fields(section)
    for key, (unit_text, low, high) in NUMBERS[section].items():
        value_node = inside.get(key)
        value = value_node.quantity(unit_text, low=low, high=high) if value_node else None
        if value is not None:
            found[key] = value
    return found


def _atom(node: Node | None) -> str:
    from planner.physics.atoms import ATOMS

    return (node.choice(ATOMS, "atom") if node else None) or ATOMS[0]


def _settings(node: Node | None, document: Document) -> dict[str, ProfileSetting]:
    found: dict[str, ProfileSetting] = {}
    played: dict[str, str] = {}
    for name, one in (node.named("settings") if node else {}).items():
        inside = one.fields("settings.<name>")
        unit_node, range_node, plays_node = inside.get("unit"), inside.get("range"), inside.get("plays")
        unit_text = unit_node.unit_text() if unit_node else None
        limits = _limits(range_node) if range_node else None
        plays = plays_node.choice(QUANTITIES, "quantity of the model") if plays_node else None
        if plays is not None and plays_node is not None:
            if plays in played:
                plays_node.problem(f'"{played[plays]}" plays {plays} already')
            played[plays] = name
        if unit_text is not None:
            low, high = limits or (None, None)
            found[name] = ProfileSetting(unit=unit_text, low=low, high=high, plays=plays)
    if node is not None and not document.problems and "hold" not in played:
        node.problem('no setting plays "hold"', 'add plays = "hold" to the setting that is the hold time')
    return found


def _limits(node: Node) -> tuple[float, float] | None:
    ends = [item.number() for item in node.items("numbers", 2)]
    if len(ends) != 2 or ends[0] is None or ends[1] is None:
        if not node.document.problems:
            node.problem("expected [lowest, highest]")
        return None
    if ends[0] >= ends[1]:
        node.problem("expected [lowest, highest], the lower one first")
        return None
    return ends[0], ends[1]


def _rest(node: Node | None) -> dict[str, float]:
    if node is None:
        return {}
    inside = node.fields("rest")
    found = {}
    for name in QUANTITIES:
        one = inside.get(name)
        value = one.quantity(UNIT_OF[name]) if one else None
        if value is not None:
            found[name] = value
    return found


def _switches(node: Node | None) -> dict[str, tuple[str, str]]:
    found: dict[str, tuple[str, str]] = {}
    for name, one in (node.named("switches") if node else {}).items():
        states = [item.text() for item in one.items("states", 2)]
        if len(states) == 2 and states[0] and states[1] and states[0] != states[1]:
            found[name] = (states[0], states[1])
        else:
            one.problem('expected the names of two states, such as ["near", "far"]')
    return found


def _follows(node: Node | None, switches: Mapping[str, tuple[str, str]]) -> tuple[str, ...]:
    if node is None:
        return ()
    names = [item.choice(list(switches), "switch") for item in node.items("switches", 8)]
    return tuple(name for name in names if name)


def _rhythm(drift: Node | None) -> tuple[float, float, float]:
    node = drift.fields("drift").get("air_handling") if drift else None
    if node is None:
        return 1200.0, 0.0, 0.0
    inside = node.fields("drift.air_handling")
    period, phase, offset = inside.get("period"), inside.get("phase"), inside.get("offset")
    return (
        (period.quantity("s", low=1.0) if period else None) or 1200.0,
        (phase.quantity("rad", low=0.0) if phase else None) or 0.0,
        (offset.quantity("", bare=True, low=0.0) if offset else None) or 0.0,
    )


def _readings(node: Node | None) -> dict[str, Reading]:
    found = {}
    for name, one in (node.named("readings") if node else {}).items():
        inside = one.fields("readings.<name>")
        unit_node = inside.get("unit")
        unit_text = unit_node.unit_text() if unit_node else None
        values = {}
        for key in ("mean", "walk", "noise"):
            value_node = inside.get(key)
            values[key] = (value_node.number() if value_node else None) or 0.0
        found[name] = Reading(unit=unit_text or "", mean=values["mean"], walk=values["walk"], noise=values["noise"])
    return found
