"""The language as its manual page, its key table and its reader know it."""

import re
from pathlib import Path

import pytest

import planner
from planner.errors import ProblemsFound
from planner.quantities import _NAMED, RARE
from planner.sequence import keys
from planner.sequence.reader import parse_sequence
from planner.sequence.rigfile import parse_rig
from tests.sequence.helpers import EXAMPLES, HERE, RIG_TEXT, SMALL, changed, small, small_rig

PAGE = (Path(planner.__file__).parent / "manual" / "sequence-language.md").read_text(encoding="utf-8")
ROW = re.compile(r"^\| `(\w+)` \| (yes)? ?\| (.+) \|$", re.MULTILINE)


def test_the_manual_lists_every_key_and_no_other() -> None:
    """The page's rows are the key table's, with the same words, in the same order."""
    page = [(name, bool(needed), says) for name, needed, says in ROW.findall(PAGE)]
    table = [
        (name, key.required, key.says)
        for schema in (keys.SEQUENCE, keys.RIG)
        for fields in schema.values()
        for name, key in fields.items()
    ]
    assert page == table


def test_the_manual_names_every_unit() -> None:
    """Every unit that can be written stands on the page."""
    words = set(re.findall(r"[A-Za-z%]+", PAGE))
    assert {name for name in _NAMED if name != "1"} | set(RARE) <= words


def test_every_key_is_read() -> None:
    """Each key of the table stands in some module of the room: no key is accepted and then ignored."""
    room = Path(planner.__file__).parent / "sequence"
    code = "".join(path.read_text(encoding="utf-8") for path in room.glob("*.py") if path.name != "keys.py")
    for schema in (keys.SEQUENCE, keys.RIG):
        for fields in schema.values():
            for name in fields:
                assert f'"{name}"' in code, name


@pytest.mark.parametrize("schema", [keys.SEQUENCE, keys.RIG], ids=["sequence", "rig"])
def test_every_needed_key_of_the_top_is_missed(schema: dict[str, dict[str, keys.Key]]) -> None:
    """An almost empty file is told everything that it lacks, at once."""
    parse = parse_sequence if schema is keys.SEQUENCE else parse_rig
    with pytest.raises(ProblemsFound) as caught:
        parse("about = 'nothing'\n", "empty.toml")
    said = " ".join(problem.message for problem in caught.value.problems)
    for name, key in schema[""].items():
        assert (f'"{name}" is missing' in said) == key.required


def test_problems_come_in_the_order_of_the_file() -> None:
    """Ten mistakes give ten problems, sorted by place, each in SI-free words."""
    text = changed(
        ('"Rb-87"', '"Rb"'),
        ('depth   = "depth"', 'depth   = "depht"'),
        ('"500 ms"', '"500 msec"'),
        ("level = 0.5", "levl = 0.5"),
        ("repeats = 2", "repeats = 0"),
        ('"curve"', '"curv"'),
    )
    with pytest.raises(ProblemsFound) as caught:
        parse_sequence(text, "six.toml")
    problems = caught.value.problems
    assert [problem.line for problem in problems] == sorted(problem.line for problem in problems)
    wheres = {problem.where for problem in problems}
    assert wheres >= {
        "atom",
        "roles.depth",
        "stages[1].lasts",
        "stages[2].pulses[1].levl",
        "fringe.repeats",
        "goal.kind",
    }
    hints = {problem.where: problem.hint + problem.message for problem in problems}
    assert '"depth"' in hints["roles.depth"]
    assert '"ms"' in hints["stages[1].lasts"]
    assert '"level"' in hints["stages[2].pulses[1].levl"]
    assert '"curve"' in hints["goal.kind"]


def test_values_are_read_in_si() -> None:
    """A file with every part filled in gives the numbers that a person would work out."""
    sequence = parse_sequence(
        SMALL.replace('kind = "curve"', 'kind = "revival"\nhours = "90 min"\ntarget = "5 %"')
        + """
details = { period = "20 ms", depth = "8 %" }
[drift.additive]
wander = 5
[drift.acceleration]
wander = "60 nm/s^2"
wander_over = "2 h"
periods = [{ period = "12 h", amplitude = "0.5 um/s^2" }]
[memory]
strength = "3 %"
fades = "1 min"
warm_up = 4
[expected]
contrast = "0.62 +- 0.05"
coherence_constant = "900 +- 200 s Er um"
lifetime = "38 s +- 6 s"
atoms = "12000 ± 1500"
[checks.short]
every = "30 min"
settings = { hold = "500 ms" }
shots = 2
[cuts.hot]
reading = "gallery_temperature"
high = 14.5
[watch.dark]
reading = "atoms"
low = 500
action = "pause"
[knobs.wait]
range = [1, 5]
spacing = "log"
""",
        "full.toml",
    )
    assert sequence.goal.hours == 1.5
    assert sequence.goal.target == 0.05
    assert sequence.goal.target_unit == "%"
    assert dict(sequence.goal.details) == {"period_s": 0.02, "depth": 0.08}
    additive, acceleration = sequence.drift
    assert (additive.wander, additive.wander_over_s) == (5.0, 36000.0)
    assert (acceleration.wander, acceleration.wander_over_s) == (6e-8, 7200.0)
    assert (acceleration.sinusoids[0].period_s, acceleration.sinusoids[0].amplitude) == (43200.0, 5e-7)
    assert (sequence.memory.strength, sequence.memory.fades_s, sequence.memory.warm_up) == (0.03, 60.0, 4)
    assert sequence.expected.contrast == (0.62, 0.05)
    assert sequence.expected.coherence_constant == pytest.approx((9e-4, 2e-4), rel=1e-14)  # two roundings
    assert sequence.expected.lifetime_s == (38.0, 6.0)
    assert sequence.expected.atoms == (12000.0, 1500.0)
    assert sequence.expected.coherence_s is None
    assert dict(sequence.checks[0].settings) == {"hold": 0.5}
    assert (sequence.checks[0].every_s, sequence.checks[0].shots) == (1800.0, 2)
    assert (sequence.cuts[0].low, sequence.cuts[0].high) == (float("-inf"), 14.5)
    assert (sequence.watch[0].for_shots, sequence.watch[0].action) == (3, "pause")
    assert (sequence.knobs[0].low, sequence.knobs[0].high, sequence.knobs[0].log) == (0.001, 0.005, True)


def test_rig_values_are_read_in_si() -> None:
    """Ticks, rates, loads and limits of the test rig, and the site of the gallery."""
    rig = small_rig()
    assert (rig.tick_s, rig.dead_time_s) == (1e-8, 0.1)
    assert rig.lines["lattice"].max_rate == 5000.0
    assert rig.lines["lattice"].load_per_hour == 20000.0
    assert (rig.lines["coil"].duty_limit, rig.lines["coil"].duty_window_s) == (0.5, 10.0)
    assert rig.lines["light"].shortest_s == 2e-6
    assert rig.setting_limits["hold"] == (0.1, 60.0)
    gallery = parse_rig((EXAMPLES[0].parent / "gallery-rig.toml").read_text(encoding="utf-8"), "gallery-rig.toml")
    assert gallery.latitude_deg == pytest.approx(50.93, rel=1e-12)
    assert gallery.time_zone == "Europe/Berlin"
    assert gallery.wavelength_m == 866e-9


def test_sweeps_together_are_bounded() -> None:
    """Sweeps that move together multiply no shots, so their values have a bound of their own."""
    text = changed(
        (
            "hold = [1, 2, 5]",
            'hold = { from = 1, to = 5, count = 150000 }\ndepth = { from = 1, to = 5, count = 150000, with = "hold" }',
        )
    )
    with pytest.raises(ProblemsFound, match="more than 200,000 values together"):
        parse_sequence(text, "wide.toml")


def test_a_flood_of_problems_says_that_there_are_more() -> None:
    """More problems than anyone reads are counted, not dropped in silence."""
    with pytest.raises(ProblemsFound) as caught:
        parse_sequence(changed(("atom ", "".join(f"key{i} = 1\n" for i in range(500)) + "atom ")), "flood.toml")
    assert len(caught.value.problems) == 201
    assert caught.value.problems[-1].message == "300 more problems are not listed"


def test_windows_line_ends_change_nothing() -> None:
    """The same file with CR LF gives the same sequence and the same places."""
    assert parse_sequence(SMALL.replace("\n", "\r\n"), "small.toml").places == small().places


def test_places_lead_to_the_words_of_the_file() -> None:
    """The place of a dotted path is where its value stands."""
    sequence = small()
    line, column = sequence.places["stages[2].pulses[1].at"]
    assert sequence.text.split("\n")[line - 1][column - 1 :].startswith('"1 ms"')
    assert HERE.name == "sequence"
    assert RIG_TEXT.count("[lines.") == 3
