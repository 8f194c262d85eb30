"""The stand-in's profile: every key is read, bounded and does something; every mistake is told with its place."""

import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import planner
from planner.errors import Problem, ProblemsFound
from planner.link.stand_in.keys import BOUNDED, MOST_WAVES, NUMBERS, QUANTITIES, RHYTHM, SCHEMA, WAVE, Number
from planner.link.stand_in.model import StandInModel
from planner.link.stand_in.profile import parse_profile, read_profile
from planner.link.stand_in.rig import capabilities_of
from planner.quantities import to_unit
from tests.link.stand_in_profiles import LEFT_OUT, LOUD, QUIET, table, toml

ROOT = Path(planner.__file__).parent.parent
PAGE = (Path(planner.__file__).parent / "manual" / "stand-in.md").read_text(encoding="utf-8")
BASE = table(LOUD)
EVERY: dict[str, Number] = {
    **{f"{section}.{key}": number for section, keys in NUMBERS.items() for key, number in keys.items()},
    **{f"rest.{key}": number for key, number in QUANTITIES.items()},
    **{f"drift.air_handling.{key}": number for key, number in RHYTHM.items()},
    **{f"tide.M2.{key}": number for key, number in WAVE.items()},
}


def problems(changes: Mapping[str, Any]) -> tuple[str, list[Problem]]:
    """The text of the loud profile with changes, and what is wrong with it."""
    text = toml(table(changes, BASE))
    try:
        parse_profile(text, "profile.toml")
    except ProblemsFound as found:
        return text, list(found.problems)
    return text, []


def only(changes: Mapping[str, Any]) -> tuple[str, Problem]:
    """The line of text that the only problem points at, and the problem."""
    text, found = problems(changes)
    assert len(found) == 1, found
    assert found[0].file == "profile.toml"
    return text.splitlines()[found[0].line - 1], found[0]


def written(number: Number, value_si: float) -> Any:
    return f"{value_si!r} {number.unit}" if number.unit else value_si


# ---- every key does something

# Values unlike those of BASE. The site is kept with the profile, and the model does not use it.
OTHERS: dict[str, Any] = {
    "signal.acceleration": "4 um/s^2",
    "cloud.atoms": 21000,
    "cloud.atoms_lost_cooling": "3 s",
    "cloud.cold_share": 0.5,
    "cloud.temperature_falls": "300 ms",
    "cloud.warmest": 5.0,
    "contrast.short_hold": 0.3,
    "contrast.cold_constant": "400 s Er um",
    "contrast.warm_constant": "20 s Er um",
    "contrast.best_detuning": "40 kHz",
    "contrast.detuning_width": "5 kHz",
    "loss.vacuum": "20 s",
    "loss.per_depth": "0.01 1/s",
    "loss.spill": "2 1/s",
    "loss.spill_depth": "10 Er",
    "noise.phase": "0.5 rad",
    "noise.acceleration": "50 um/s^2",
    "noise.atoms": 0.2,
    "noise.detection": 100,
    "noise.background": 500,
    "noise.saturates": 4000,
    "memory.strength": -0.3,
    "memory.fades": "5 s",
    "drift.phase": "3 rad",
    "drift.acceleration": "20 um/s^2",
    "drift.offset": 0.2,
    "drift.contrast": 0.5,
    "drift.atoms": 0.5,
    "faults.unlocks_per_hour": 10,
    "faults.unlock_lasts": "40 min",
    "faults.outliers": 0.5,
    "drift.air_handling.period": "500 s",
    "drift.air_handling.phase": "1 rad",
    "drift.air_handling.offset": 0.1,
    "tide.M2.period": "1 h",
    "tide.M2.amplitude": "70 um/s^2",
    "tide.M2.phase": "90 deg",
    "rest.hold": "5 s",
    "rest.readout": "60 deg",
    "rest.depth": "20 Er",
    "rest.separation": "10 um",
    "rest.cooling": "100 ms",
    "rest.detuning": "50 kHz",
    "atom": "Cs-133",
    "wavelength": "1064 nm",
    "signal.follows": ["kick"],
    "readings.tilt.mean": 13,
    "readings.tilt.walk": 60,
    "readings.tilt.noise": 5,
    "settings.depth.plays": LEFT_OUT,
    "settings.hold.unit": "min",
    "name": "another stand-in",
    "settings.hold.range": [1, 20],
    "switches.collar": ["far", "near"],
    "readings.tilt.unit": "mrad",
}
LOUD_TIDE = {"tide.M2.amplitude": "50 um/s^2"}  # so that a change of its period or phase is seen


def night(changes: Mapping[str, Any]) -> object:
    """Three nights, and what the rig says of itself: all that a user can see of a profile."""
    profile = parse_profile(toml(table({**LOUD_TIDE, **changes}, BASE)), "profile.toml")
    rig, able = StandInModel(profile, 5), capabilities_of(profile)
    times = 125.0 * np.arange(60.0)
    signs = {"collar": np.resize([1.0, -1.0], 60), "kick": np.resize([1.0, 1.0, -1.0, -1.0], 60)}
    loads = rig.loads(times, np.full(60, 40.0))
    nights = []
    moved = {"hold": np.full(60, 4.0), "depth": np.full(60, 3.0), "readout": np.resize([0.0, 1.5], 60)}
    tuned = {**moved, "cooling": np.full(60, 0.1), "detuning": np.full(60, 30e3)}  # off rest, and off the best
    for settings in ({}, moved, tuned):
        counts = rig.night(settings, signs, times, np.arange(60), load=loads)
        columns = [counts.atoms_a, counts.atoms_b, counts.background, counts.saturated, *counts.readings.values()]
        nights.append([column.tobytes() for column in columns])
    return able, nights


UNCHANGED = night({})


@pytest.mark.parametrize("place", OTHERS)
def test_every_key_has_an_effect(place: str) -> None:
    """With another value at one key the counts, the readings or what the rig says of itself are another."""
    assert night({place: OTHERS[place]}) != UNCHANGED


def test_no_key_is_left_out_of_that() -> None:
    """The list above is the whole table of keys, but for remarks, the version, and the site."""
    listed = {re.sub(r"^(settings|readings|tide|switches)\.\w+", r"\1.<name>", place) for place in OTHERS}
    keys = {
        f"{kind}.{name}".lstrip(".")
        for kind, fields in SCHEMA.items()
        for name in fields
        if name != "about" and kind != "site" and f"{kind}.{name}".lstrip(".") not in SCHEMA
    }
    tables_of_names = {"settings", "switches", "readings", "tide"}
    assert listed == (keys - tables_of_names - {"nightfringe_stand_in"}) | {"switches.<name>"}


def test_the_site_and_remarks_change_nothing() -> None:
    """They are kept with the profile."""
    site = {"site.latitude": "-20 deg", "site.longitude": "100 deg", "site.height": "5 m"}
    assert night({**site, "about": "a remark", "cloud.about": "another"}) == UNCHANGED
    assert night({"site": {}}) == UNCHANGED


def test_what_a_profile_may_leave_out() -> None:
    """Without the optional tables there is none of what they make, and the rest is as the manual says."""
    optional = ("rest", "switches", "signal", "memory", "drift", "tide", "faults", "site", "readings")
    profile = parse_profile(toml(table(dict.fromkeys(optional, LEFT_OUT))), "profile.toml")
    assert profile.rest == {
        "hold": 1.0,
        "readout": 0.0,
        "depth": 9.0,
        "separation": 4e-6,
        "cooling": 0.4,
        "detuning": 0.0,
    }
    assert (profile.tide, profile.follows, profile.switches, profile.readings) == ((), (), {}, {})
    assert profile.numbers["memory.fades"] == 60.0
    gone = [f"{section}.{key}" for section in optional for key in NUMBERS.get(section, {}) if key != "fades"]
    assert {profile.numbers[place] for place in gone} == {0.0}
    for quantity, number in QUANTITIES.items():  # ... in the page's own words
        value = to_unit(profile.rest[quantity], {"separation": "um", "cooling": "ms"}.get(quantity, number.unit))
        assert f"{quantity} {value:g}" in " ".join(PAGE.split())


# ---- bounds, units, unknown keys


@pytest.mark.parametrize("place", EVERY)
def test_every_number_is_bounded(place: str) -> None:
    """Both ends are allowed; a little beyond either is not, and the problem has the line, the bounds and the value."""
    number = EVERY[place]
    for end, beyond in (
        (number.low, number.low - 1e-3 * max(abs(number.low), 1e-6)),
        (number.high, number.high * 1.001),
    ):
        assert problems({place: written(number, end)})[1] == []
        line, problem = only({place: written(number, beyond)})
        assert line.startswith(place.rpartition(".")[2] + " = ")
        assert problem.where == place
        assert re.fullmatch(r"expected \S+ to \S+( .+)?; found .+", problem.message), problem.message
        assert f"{number.low:.6g} to {number.high:.6g}" in problem.message


@pytest.mark.parametrize("place", EVERY)
def test_every_unit_is_checked(place: str) -> None:
    """A quantity of another dimension, a quantity without unit, a plain number with one: each is told in its line."""
    number = EVERY[place]
    wrong: list[Any] = ["5 kg", True, "1,5 s", "nan"]
    wrong += [1.5, "1.5"] if number.unit else []
    for value in wrong:
        line, problem = only({place: value})
        assert line.startswith(place.rpartition(".")[2] + " = ")
        assert problem.where == place
        assert "expected" in problem.message or value == "1,5 s"  # there it says how to write a decimal point
        assert "found" in problem.message or value == "nan"
    assert only({place: "5 kg"})[1].message.count("kg") >= 1


@pytest.mark.parametrize("kind", [kind for kind in SCHEMA if kind])
def test_an_unknown_key_is_told(kind: str) -> None:
    """In every table, with its line, and with the nearest key there is."""
    where = kind.replace("<name>", {"settings": "hold", "readings": "tilt", "tide": "M2"}.get(kind.split(".")[0], ""))
    known = next(name for name in SCHEMA[kind] if name != "about")
    line, problem = only({f"{where}.{known}x": 1})
    assert line == f"{known}x = 1"
    assert f'unknown key "{known}x"' in problem.message
    assert known in problem.hint


@pytest.mark.parametrize(
    "place", [f"{kind}.{key}".lstrip(".") for kind, keys in SCHEMA.items() for key, one in keys.items() if one.required]
)
def test_a_needed_key_is_missed(place: str) -> None:
    """Each key that the table calls needed is asked for, by name."""
    named = place.replace("settings.<name>", "settings.hold").replace("readings.<name>", "readings.tilt")
    named = named.replace("tide.<name>", "tide.M2")
    _, found = problems({named: LEFT_OUT})
    key = named.rpartition(".")[2]
    assert any(f'"{key}" is missing' in problem.message for problem in found)


@pytest.mark.parametrize(
    ("changes", "where", "words"),
    [
        ({"nightfringe_stand_in": 2}, "nightfringe_stand_in", "from 1 to 1; found 2"),
        ({"name": " "}, "name", "expected a name; found nothing"),
        ({"atom": "Rb-88"}, "atom", 'no atom "Rb-88"'),
        ({"wavelength": "866 um"}, "wavelength", "expected 1e-07 to 0.0001 m; found"),
        ({"settings.hold.plays": "holding"}, "settings.hold.plays", 'no quantity of the model "holding"'),
        (
            {"settings.depth.plays": "hold", "settings.depth.unit": "s"},
            "settings.depth.plays",
            '"hold" plays hold already',
        ),
        ({"settings.hold.plays": LEFT_OUT}, "settings", 'no setting plays "hold"'),
        ({"settings.hold.unit": "um"}, "settings.hold.unit", 'expected a unit of hold, such as s; found "um"'),
        ({"settings.hold.unit": ""}, "settings.hold.unit", 'expected a unit of hold, such as s; found ""'),
        ({"settings.hold.range": [90, 1]}, "settings.hold.range", "the lower one first; found [90, 1]"),
        ({"settings.hold.range": [1]}, "settings.hold.range", "expected [lowest, highest]; found a list of 1"),
        ({"settings.hold.range": "1 to 90"}, "settings.hold.range", 'expected [lowest, highest]; found "1 to 90"'),
        ({"settings.hold.range": [-1, 90]}, "settings.hold.range", "hold within 0 to 100000 s; found -1 to 90 s"),
        ({"settings.depth.range": [0, 40]}, "settings.depth.range", "depth within 0.01 to 1000 Er; found 0 to 40 Er"),
        ({"settings.separation.range": [0, 9]}, "settings.separation.range", "found 0 to 9e-06 m"),
        ({"switches.collar": ["near"]}, "switches.collar", "the names of two states"),
        ({"switches.collar": ["near", "near"]}, "switches.collar", "the names of two states"),
        ({"signal.follows": []}, "signal.follows", "at least one switch"),
        ({"signal.follows": ["kick", "kick"]}, "signal.follows", "each switch once"),
        ({"signal.follows": ["kik"]}, "signal.follows[1]", 'no switch "kik"'),
        ({"readings.tilt.noise": -1}, "readings.tilt.noise", "expected at least 0; found -1"),
        ({"readings.tilt.walk": -0.1}, "readings.tilt.walk", "expected at least 0; found -0.1"),
        ({"readings.tilt.mean": "12 urad"}, "readings.tilt.mean", "expected a plain number"),
        ({"readings.tilt.unit": "furlong"}, "readings.tilt.unit", "furlong"),
        ({"tide": 5}, "tide", "expected a table of waves; found 5"),
        ({"drift": {"air_handling": 3}}, "drift.air_handling", "expected a table"),
        ({"cloud": "big"}, "cloud", "expected a table with"),
    ],
)
def test_other_mistakes(changes: dict[str, Any], where: str, words: str) -> None:
    """Each with its path, what was expected and what was found."""
    _, found = problems(changes)
    assert any(problem.where == where and words in problem.message for problem in found), found
    assert all(problem.line > 0 for problem in found)


@pytest.mark.parametrize("quantity", QUANTITIES)
def test_a_range_is_needed_where_the_model_ends(quantity: str) -> None:
    """A setting without a range would let through a hold below zero or a depth of none."""
    _, found = problems({f"settings.{quantity}.range": LEFT_OUT} if quantity != "readout" else {})
    said = [problem.message for problem in found]
    assert said == ([f'"range" is missing: a setting that plays {quantity} needs one'] if quantity in BOUNDED else [])


def test_the_tide_is_bounded_in_number() -> None:
    """More waves than that are refused, as many are read."""
    wave = {"period": "12 h", "amplitude": "1 nm/s^2"}
    most = {"tide": {f"W{i}": wave for i in range(MOST_WAVES)}}
    assert len(parse_profile(toml(table(most)), "profile.toml").tide) == MOST_WAVES
    _, problem = only({"tide": {f"W{i}": wave for i in range(MOST_WAVES + 1)}})
    assert problem.message == f"at most {MOST_WAVES} waves; found {MOST_WAVES + 1}"


def test_all_mistakes_at_once() -> None:
    """Three mistakes in three tables are three problems, in the order of the file."""
    _, found = problems({"noise.phase": "60 ms", "cloud.atoms": -1, "drift.ofset": 0.1})
    assert [problem.where for problem in found] == ["cloud.atoms", "noise.phase", "drift.ofset"]


def test_a_missing_file_and_a_broken_one(tmp_path: Path) -> None:
    """Both are problems with the file's name; the broken one has its line."""
    with pytest.raises(ProblemsFound, match="no such stand-in profile"):
        read_profile(tmp_path / "none.toml")
    broken = tmp_path / "broken.toml"
    broken.write_text("name = 'x'\natom = Rb\n", encoding="utf-8")
    with pytest.raises(ProblemsFound) as caught:
        read_profile(broken)
    assert (caught.value.problems[0].line, caught.value.problems[0].file) == (2, str(broken))


def test_the_shipped_profile_is_sound() -> None:
    """The demo's profile reads without a problem and names its waves' periods and its switches."""
    profile = read_profile(ROOT / "sequences" / "gallery-stand-in.toml")
    assert {setting.plays for setting in profile.settings.values()} == {*QUANTITIES, None}
    assert profile.follows == ("collar",)


# ---- the manual


def rows() -> list[tuple[str, bool, str, str]]:
    found = re.findall(r"^\| `(\w+)` \| (yes)? ?\| (.*?) ?\| (.+) \|$", PAGE, re.MULTILINE)
    return [(name, bool(needed), span, says) for name, needed, span, says in found]


def test_the_manual_lists_every_key_with_its_bounds() -> None:
    """The page's rows are the table of keys, no more and no fewer, with the same bounds, units and words."""
    spans = {f"rest.{key}": one for key, one in QUANTITIES.items()} | {
        f"{kind}.{key}": one
        for kind, keys in {**NUMBERS, "drift.air_handling": RHYTHM, "tide.<name>": WAVE}.items()
        for key, one in keys.items()
    }
    table_rows = []
    for kind, keys in SCHEMA.items():
        for name, key in keys.items():
            one = spans.get(f"{kind}.{name}")
            span = f"{one.low:g} to {one.high:g} {one.unit}".strip() if one else ""
            table_rows.append((name, key.required, span, key.says))
    assert sorted(rows()) == sorted(table_rows)


def test_the_manual_has_a_section_for_every_table() -> None:
    """Each table of a profile has its heading."""
    headings = set(re.findall(r"^### `\[(\w+)\]`$", PAGE, re.MULTILINE))
    assert headings == {kind.split(".")[0] for kind in SCHEMA if kind} | {"settings"}
    assert set(QUIET) - {"nightfringe_stand_in", "name", "atom", "wavelength", "switches"} == headings
