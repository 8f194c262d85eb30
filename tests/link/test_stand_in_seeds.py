"""The same seed, shots and times give the same bytes, however they are asked for and whenever the rig was started."""

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import timedelta
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.journal import Journal
from planner.link.messages import ShotReport, new_key
from planner.link.stand_in.model import Counts
from planner.link.stand_in.rig import REMEMBERED, Past, StandInRig, capabilities_of
from tests.link.rigs import EVENING, make_intent
from tests.link.stand_in_profiles import LOUD, model, play

SHOTS = 40
TIMES = 37.5 * np.arange(float(SHOTS))
HOLDS = np.resize([0.5, 4.0, 25.0], SHOTS)


def flat(counts: Counts) -> bytes:
    """Everything of a night as bytes."""
    columns = [counts.atoms_a, counts.atoms_b, counts.background, counts.saturated, counts.unlocked, counts.outlier]
    return b"".join(np.ascontiguousarray(column).tobytes() for column in [*columns, *counts.readings.values()])


def test_the_same_seed_gives_the_same_bytes() -> None:
    """Two models of one seed agree to the byte; ten other seeds each give other counts in every shot."""
    free = {**LOUD, "noise.saturates": 1e12}  # saturated outputs are alike whatever the seed
    one, same = (play(model(free, 7), TIMES, hold=HOLDS, readout=1.0) for _ in range(2))
    assert flat(one) == flat(same)
    for seed in (0, 1, 2, 3, 4, 5, 6, 8, 9, 2**40):
        other = play(model(free, seed), TIMES, hold=HOLDS, readout=1.0)
        assert not np.any(other.atoms_a == one.atoms_a)
        assert not np.any(other.readings["tilt"] == one.readings["tilt"])


@settings(max_examples=25, deadline=None)
@given(st.permutations(range(SHOTS)), st.lists(st.integers(1, SHOTS - 1), max_size=5))
def test_pieces_and_order_do_not_matter(order: list[int], cuts: list[int]) -> None:
    """Any shots, asked for in any order and pieces, are the same: each belongs to its number and its time."""
    rig = model(LOUD, 3)
    whole = play(rig, TIMES, hold=HOLDS, readout=1.0)
    for piece in np.split(np.array(order), sorted(set(cuts))):
        asked = rig.night(
            {"hold": HOLDS[piece], "readout": np.ones(len(piece))},
            {},
            TIMES[piece],
            1 + piece,
            load=np.zeros(len(piece)),
        )
        for name in ("atoms_a", "atoms_b", "background", "saturated", "unlocked", "outlier"):
            np.testing.assert_array_equal(getattr(asked, name), getattr(whole, name)[piece])
        np.testing.assert_array_equal(asked.readings["tilt"], whole.readings["tilt"][piece])


def test_shots_far_apart_in_number() -> None:
    """Numbers a million apart are drawn each by itself, and give the same."""
    rig = model(LOUD, 3)
    ordinal = np.array([1, 1_000_000, 5])
    counts = rig.night({"hold": np.ones(3)}, {}, TIMES[:3], ordinal, load=np.zeros(3))
    for i in range(3):
        assert rig.shot({"hold": 1.0}, {}, float(TIMES[i]), int(ordinal[i]), []).atoms_a == counts.atoms_a[i]


def test_numbers_of_neighbouring_shots_are_new() -> None:
    """No two of 20,000 shots share a draw, nor do two readings."""
    rig = model(
        {"noise.detection": 40, "readings.tilt.noise": 1, "readings.other": {"unit": "V", "mean": 0, "noise": 1}}
    )
    counts = play(rig, np.zeros(20_000), hold=1.0)
    for column in (*counts.readings.values(), counts.atoms_a % 1):
        assert len(np.unique(column)) > 19_990  # 40 atoms' noise, modulo one atom, keeps some 12 digits
    assert abs(np.corrcoef(list(counts.readings.values()))[0, 1]) < 5 / np.sqrt(20_000)


@contextmanager
def started(journal: Path, changes: dict[str, object]) -> Iterator[Host]:
    """The stand-in behind a host as the command starts it: what goes on comes from the journal."""
    kept = Journal(journal)
    recovered = kept.recovered
    asked = model({**LOUD, **changes}, 11)
    clock = SimulatedClock(max(EVENING, recovered.latest or EVENING))
    origin = recovered.earliest or EVENING
    rig = StandInRig(asked, capabilities_of(asked.profile), origin=origin, paced=False)
    yield Host(rig, clock, journal=kept)
    kept.close()


def boots(journal: Path, changes: dict[str, object], *counts: int) -> list[object]:
    """The results of so many shots in each of several boots with one journal."""
    found = []
    for count in counts:
        with started(journal, changes) as host:
            found += results(shots(host, count))
    return found


def shots(host: Host, count: int) -> list[ShotReport]:
    found = []
    for _ in range(count):
        key = new_key()
        host.put(key, make_intent(host.describe(), settings={"hold": 4.0, "readout": 60.0}, switches={}))
        found.append(host.ask(key, 25.0))
        host.ack([key])
    return found


def results(reports: list[ShotReport]) -> list[object]:
    return [(report.ordinal, report.atoms, report.detection, report.readings, report.flags) for report in reports]


def test_a_restart_changes_nothing_but_the_load(tmp_path: Path) -> None:
    """Twelve shots in one go, or with two restarts: the same, save for the load of the shots before a restart."""
    no_load: dict[str, object] = {"memory.strength": 0}
    whole = boots(tmp_path / "whole.jsonl", no_load, 12)
    assert boots(tmp_path / "parts.jsonl", no_load, 5, 1, 6) == whole
    loaded = boots(tmp_path / "loaded.jsonl", {}, 12)
    again = boots(tmp_path / "again.jsonl", {}, 5, 7)
    assert again[:5] == loaded[:5]
    assert again[5:] != loaded[5:]


def test_what_is_remembered_is_enough() -> None:
    """Short shots back to back: the load from those remembered is that of the whole night, to 1e-5 of it."""
    starts = np.arange(3000.0)
    rig = model({"memory.strength": 0.5, "cloud.atoms": 1e9})
    load = float(rig.loads(starts, np.full(3000, 0.9))[-1])
    assert load == pytest.approx(0.9, rel=0.02)  # nine tenths of the time is spent in shots
    past = [Past(start_s=float(t), duration_s=0.9, settings_si={}) for t in starts[-1 - REMEMBERED : -1]]
    loaded, free = (rig.shot({"hold": 0.0}, {}, 2999.0, 1, history) for history in (past, []))
    gained = (loaded.atoms_a + loaded.atoms_b) / (free.atoms_a + free.atoms_b) - 1
    assert gained == pytest.approx(0.5 * load, rel=1e-5)


def test_drifts_begin_where_the_rig_first_began() -> None:
    """A rig asked an hour after its origin is an hour into its drifts."""
    asked = model({"readings.tilt.walk": 6})
    origin = EVENING - timedelta(hours=1)
    host = Host(StandInRig(asked, capabilities_of(asked.profile), origin=origin, paced=False), SimulatedClock(EVENING))
    (report,) = shots(host, 1)
    assert report.readings["tilt"] == play(asked, np.array([3600.0]), hold=4.0).readings["tilt"][0]
    assert report.readings["tilt"] != 12
