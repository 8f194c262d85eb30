"""Sequence to shots and timelines."""

import json
import math
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.errors import ProblemsFound
from planner.sequence.compiler import compile_sequence
from tests.sequence.helpers import EXAMPLES, SEQUENCES, compiled, compiled_file, small, small_rig


def test_reference_night_a_is_the_night_that_orders_are_compared_on() -> None:
    """2,112 shots in 264 packets, 9.64 h, 12 holds log-spaced 0.25 to 64 s, every cycle the hold plus 3 s."""
    made = compiled_file(SEQUENCES / "reference-night-a.toml")
    table = made.table
    assert len(table) == 2112
    assert table.packet[-1] + 1 == 264
    assert round(table.duration_s.sum() / 3600, 2) == 9.64
    # source: definition of a log spacing; numpy's own geomspace. Holds are the asked ones; shots play whole ticks of
    # 10 ns, so the cycle may differ from hold + 3 s by half a tick for each of its eight stages.
    np.testing.assert_allclose(np.unique(table.hold_s), np.geomspace(0.25, 64, 12), rtol=1e-12, atol=0)
    np.testing.assert_allclose(table.duration_s, table.hold_s + 3.0, rtol=0, atol=8 * 5e-9)
    for packet in range(264):
        rows = table.packet == packet
        assert len(set(table.hold_s[rows])) == 1
        pairs = set(zip(np.rint(np.rad2deg(table.phase_rad[rows])), table.switches["kick"][rows], strict=True))
        assert pairs == {(phase, sign) for phase in (0, 90, 180, 270) for sign in (1, -1)}


def test_reference_night_b_has_its_switches_and_fits_its_night() -> None:
    """Holds 8 and 20 s, phases -90 and +90 deg, one slow and one fast switch, the product wanted, within 10 h."""
    made = compiled_file(SEQUENCES / "reference-night-b.toml")
    table = made.table
    assert set(table.hold_s) == {8.0, 20.0}
    assert set(np.rint(np.rad2deg(table.phase_rad))) == {90.0, 270.0}
    # a slow switch is constant in a packet, a fast one is not
    for packet in range(int(table.packet[-1]) + 1):
        rows = table.packet == packet
        assert len(set(table.switches["collar"][rows])) == 1
        assert set(table.switches["kick"][rows]) == {1, -1}
    hours = table.duration_s.sum() / 3600
    dwells = 10 * 3600 / 480
    assert hours + dwells * 25 / 3600 < 10.0


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_every_example_compiles_to_a_balanced_table(path: Path) -> None:
    """Every cell has as many packets, every packet as many shots, neighbours in the table, each timeline used."""
    made = compiled_file(path)
    table = made.table
    assert np.all(np.diff(table.packet) >= 0)
    assert len(set(np.bincount(table.packet))) == 1
    assert len(set(np.bincount(table.cell))) == 1
    assert np.all(table.cell == table.packet // (table.repeat.max() + 1))
    played = set(table.timeline) | {int(row) for check in made.checks.values() for row in check.timeline}
    assert played == set(range(len(made.timelines)))
    assert np.all((table.phase_rad >= 0) & (table.phase_rad < 2 * math.pi))
    for column in (*table.settings.values(), *table.switches.values(), table.hold_s, table.duration_s, table.timeline):
        assert len(column) == len(table)


def test_the_demonstration_night_is_long_enough() -> None:
    """hold-scan.toml has at least 400 shots and 9 h."""
    table = compiled_file(SEQUENCES / "hold-scan.toml").table
    assert len(table) >= 400
    assert table.duration_s.sum() >= 9 * 3600


def test_a_timeline_is_what_the_file_says() -> None:
    """Worked out by hand for one shot: ticks of 10 ns, edges [tick, from, to] in the line's unit."""
    made = compiled()
    document = made.timelines.document(int(made.table.timeline[0]))
    ms = 100_000  # ticks of 10 ns in a millisecond
    assert document["ticks"] == (500 + 20 + 10 + 1000 + 10) * ms
    assert document["lines"]["coil"] == {"unit": "A", "edges": [[0, 8.0, 8.0], [500 * ms, 0.0, 0.0]]}
    assert document["lines"]["lattice"]["edges"] == [
        [0, 0.0, 0.0],
        [520 * ms, 0.0, 10.0],
        [530 * ms, 10.0, 10.0],
        [1530 * ms, 10.0, 0.0],
    ]
    assert document["lines"]["light"]["edges"] == [
        [0, 1.0, 1.0],
        [500 * ms, 0.0, 0.0],
        [501 * ms, 0.5, 0.5],
        [501 * ms + 5000, 0.0, 0.0],
        [503 * ms, 0.5, 0.5],
        [503 * ms + 5000, 0.0, 0.0],
    ]
    assert made.table.duration_s[0] == pytest.approx(1.54 + 0.1, rel=1e-12)


def test_distinct_timelines_are_few_and_each_shot_plays_its_own() -> None:
    """Timelines are as many as the holds that they depend on; a shot's length is its timeline's and the dead time."""
    made = compiled()
    assert len(made.timelines) == 3
    ticks = np.array([made.timelines.document(i)["ticks"] for i in range(3)])
    np.testing.assert_allclose(made.table.duration_s, ticks[made.table.timeline] * 1e-8 + 0.1, rtol=1e-12, atol=0)
    assert len({made.timelines.digest(i) for i in range(3)}) == 3


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda path: path.stem)
def test_each_shot_plays_a_timeline_of_its_own_settings(path: Path) -> None:
    """Whatever a timeline depends on has, in every shot that plays it, the value that the shot's row says."""
    made = compiled_file(path)
    for name, column in made.timelines.columns.items():
        np.testing.assert_array_equal(column[made.table.timeline], made.table.settings[name])
        for check in made.checks.values():
            np.testing.assert_array_equal(column[check.timeline], check.settings[name])


def test_compile_is_deterministic() -> None:
    """The same text gives the same table and the same digests."""
    one, two = compiled(), compiled()
    assert [one.timelines.digest(i) for i in range(3)] == [two.timelines.digest(i) for i in range(3)]
    for name in ("hold_s", "phase_rad", "duration_s", "cell", "packet", "repeat", "timeline"):
        assert getattr(one.table, name).tobytes() == getattr(two.table, name).tobytes()
    assert json.dumps(one.timelines.document(0)) == json.dumps(two.timelines.document(0))


@settings(max_examples=30, deadline=None)
@given(st.integers(1, 10_000_000), st.sampled_from(['"500 ms"', '"20 ms"', '"10 ms"\nramps = { lattice = { from = "d']))
def test_a_longer_stage_shifts_what_follows_and_nothing_before(extra: int, stage: str) -> None:
    """Adding whole ticks to one stage moves every later edge by as much and leaves the earlier ones where they were."""
    before = compiled()
    length = stage.split('"')[1]
    after = compiled((stage, stage.replace(f'"{length}"', f'"{length} + {extra * 10} ns"', 1)))
    old, new = before.timelines.document(0), after.timelines.document(0)
    ends = {"500 ms": 50_000_000, "20 ms": 52_000_000, "10 ms": 154_000_000}
    end = ends[length]
    assert new["ticks"] == old["ticks"] + extra
    for name, line in old["lines"].items():
        moved = [[tick if tick < end else tick + extra, low, high] for tick, low, high in line["edges"]]
        assert new["lines"][name]["edges"] == moved


def test_sweeps_cross_and_move_together() -> None:
    """Two sweeps are crossed; one that moves `with` another is not."""
    crossed = compiled(("[fringe]", "depth = [5, 10]\n[fringe]")).table
    assert len(set(zip(crossed.hold_s, crossed.settings["depth"], strict=True))) == 6
    together = compiled(("[fringe]", 'depth = { values = [5, 10, 20], with = "hold" }\n[fringe]')).table
    assert set(zip(together.hold_s, together.settings["depth"], strict=True)) == {(1.0, 5.0), (2.0, 10.0), (5.0, 20.0)}
    # one hold at two depths is two points, not a value that stands twice
    twice = compiled(
        ("[1, 2, 5]", "[1, 1, 5]"), ("[fringe]", 'depth = { values = [5, 10, 20], with = "hold" }\n[fringe]')
    )
    assert len(twice.table) == len(together)


@pytest.mark.parametrize(
    ("sweep", "values"),
    [
        ("[1, 2, 5]", [1, 2, 5]),
        ('["100 ms", 2]', [0.1, 2]),
        ("{ values = [3, 1] }", [3, 1]),
        ("{ from = 1, to = 4, count = 4 }", [1, 2, 3, 4]),
        ('{ from = "4 s", to = "1 s", count = 4 }', [4, 3, 2, 1]),
        ('{ from = 1, to = 16, count = 5, spacing = "log" }', [1, 2, 4, 8, 16]),
        ("{ around = 2, span = 1, count = 3 }", [1.5, 2, 2.5]),
        ("{ from = 1, to = 2, step = 0.25 }", [1, 1.25, 1.5, 1.75, 2]),
        ("{ from = 0.1, to = 0.7, step = 0.2 }", [0.1, 0.3, 0.5, 0.7]),
        ("{ from = 1, to = 2, step = 0.3 }", [1, 1.3, 1.6, 1.9]),
        ('{ from = 2, to = 1, step = "-500 ms" }', [2, 1.5, 1]),
    ],
)
def test_each_form_of_sweep_gives_its_values(sweep: str, values: list[float]) -> None:
    """Listed, linear, log, around a centre, in steps, with and without units."""
    found = small(("hold = [1, 2, 5]", f"hold = {sweep}")).sweeps[0].values["hold"]
    np.testing.assert_allclose(found, values, rtol=1e-12, atol=0)


def test_check_shots_have_a_table_and_a_timeline_of_their_own() -> None:
    """Check shots stand beside the plan's shots: their settings, their length, and no say about switches."""
    made = compiled(
        ("[[stages]]", '[switches.kick]\nstates = ["up", "down"]\n[[stages]]'),
        ("[goal]", '[checks.short]\nevery = "30 min"\nsettings = { hold = "0.3 s", readout = 450 }\nshots = 3\n[goal]'),
    )
    assert len(made.table) == 3 * 4 * 2 * 2
    check = made.checks["short"]
    assert len(check) == 3
    np.testing.assert_allclose(check.hold_s, 0.3, rtol=1e-15)
    np.testing.assert_allclose(check.phase_rad, np.pi / 2, rtol=1e-12)
    np.testing.assert_allclose(check.duration_s, 0.84 + 0.1, rtol=1e-12)
    assert set(check.switches["kick"]) == {0}
    assert set(check.packet) == {-1}
    assert made.timelines.document(int(check.timeline[0]))["ticks"] == 84_000_000
    assert set(check.timeline).isdisjoint(set(made.table.timeline))


def problems_of(*changes: tuple[str, str], rig: tuple[tuple[str, str], ...] = ()) -> list[tuple[str, str]]:
    with pytest.raises(ProblemsFound) as caught:
        compile_sequence(small(*changes), small_rig(*rig))
    return [(problem.where, problem.message) for problem in caught.value.problems]


def test_only_some_shots_beyond_a_limit_are_found_and_named() -> None:
    """A level that only one point of a sweep takes beyond its limit is refused, and the shot is named."""
    rig = (("range = [0, 40]", "range = [0, 12]"),)
    found = problems_of(("[fringe]", "depth = [5, 10, 15]\n[fringe]"), rig=rig)
    assert {where for where, _ in found} == {
        "stages[3].ramps.lattice.to",
        "stages[4].levels.lattice",
        "stages[5].ramps.lattice.from",
    }
    assert all("depth = 15 Er" in message and "15 Er is beyond" in message for _, message in found)


def test_overlap_that_only_one_setting_value_makes_is_found() -> None:
    """Two pulses that change places or overlap at one value of a setting are refused at that value."""
    found = problems_of(
        ("[fringe]", 'wait = ["1 ms", "0 ms", "2 ms"]\n[fringe]'), ('"2 ms + wait"', '"1.02 ms + wait"')
    )
    assert [where for where, _ in found] == ["stages[2].pulses[2]"]
    assert "wait = 0 ms" in found[0][1]


def test_pulses_may_stand_in_any_order_in_the_file() -> None:
    """Edges come in time order whatever the order of the pulses in the file."""
    swapped = compiled(
        ('at = "1 ms", lasts', 'at = "2 ms + wait + 0 ms", lasts'), ('at = "2 ms + wait", lasts', 'at = "1 ms", lasts')
    )
    assert swapped.timelines.document(0)["lines"] == compiled().timelines.document(0)["lines"]


def test_rounding_to_ticks_is_said_in_phase() -> None:
    """A hold between two ticks is rounded; the note says by how much in interferometer phase."""
    notes = compiled(("hold = [1, 2, 5]", 'hold = ["1.000000004 s"]')).notes
    # m g dz dt / hbar for Rb-87, 4 um, 4 ns: 1.4432e-25 kg * 9.80665 m/s^2 * 4e-6 m * 4e-9 s / 1.05457e-34 J s
    # source: hand calculation from CODATA 2018 values (from memory); 0.215 mrad to the three digits shown
    assert "at most 4 ns" in notes[0]
    assert "0.215 mrad" in notes[0]


def test_every_edge_of_every_track_is_in_order() -> None:
    """Edges in a document rise strictly, start at 0 and end before the shot does."""
    for path in EXAMPLES:
        made = compiled_file(path)
        for i in range(len(made.timelines)):
            document: dict[str, Any] = made.timelines.document(i)
            for line in document["lines"].values():
                ticks = [edge[0] for edge in line["edges"]]
                assert ticks[0] == 0
                assert all(a < b for a, b in pairwise(ticks))
                assert ticks[-1] < document["ticks"]
