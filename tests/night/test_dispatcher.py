"""One night at a rig that behaves, and the decisions a dispatcher takes when it does not."""

import json
from datetime import timedelta
from typing import Any

import numpy as np
import pytest

from planner.errors import InputError, LimitExceeded, LogbookConflict, RigFenced, RigMalformed, RigRefused
from planner.link.adapter import Capabilities, Result, Shot, ShotFailed
from planner.link.host import Host
from planner.link.messages import SettingRange
from tests.link.rigs import EVENING, BenchRig, make_intent
from tests.night.conftest import NewBench


class Wrapped:
    """The rig with some of its calls replaced."""

    def __init__(self, host: Host, **calls: Any) -> None:
        self._host = host
        self._calls = calls

    def __getattr__(self, name: str) -> Any:
        return self._calls.get(name, getattr(self._host, name))


def test_a_night_runs_in_order_and_once(new_bench: NewBench) -> None:
    """Every shot once, in the order's order, all results stored and acknowledged, the night done."""
    bench = new_bench()
    assert bench.dispatcher().run() == "done"
    columns = bench.columns()
    assert columns["position"].tolist() == list(range(8))
    assert set(bench.rig.played.values()) == {1}
    assert list(bench.rig.played) == bench.keys
    assert (columns["state"] == "done").all()
    assert bench.host.since(0).shots == []  # all acknowledged: the rig keeps none
    assert [now.sent for now in bench.told] == list(range(1, 9))
    assert bench.book.night().state == "done"


def test_the_rig_always_holds_the_next_shot(new_bench: NewBench) -> None:
    """Shots follow each other without a gap: the next one waits at the rig while one runs."""
    bench = new_bench()
    bench.dispatcher().run()
    columns = bench.columns()
    ends = columns["start_s"] + columns["duration_s"]
    settle_s = np.array([0.0, 0.0, 0.0, 25.0, 0.0, 0.0, 0.0])  # the collar moves before the fifth shot
    np.testing.assert_allclose(columns["start_s"][1:] - ends[:-1], settle_s, rtol=0, atol=2e-6)  # clock ticks of 1 us


def test_the_first_shot_waits_for_everything_to_settle(new_bench: NewBench) -> None:
    """Nobody knows how the switches stand when a night begins: the first shot has the longest settle wait."""
    bench = new_bench()
    bench.dispatcher().run()
    assert bench.columns()["start_s"][0] == pytest.approx(25.0, abs=1e-6)


def test_a_key_is_on_disk_before_it_is_sent(new_bench: NewBench) -> None:
    """At the moment of sending, the attempt is in the logbook; at the moment of acknowledging, its result is."""
    bench = new_bench()
    seen: list[str] = []

    def put(key: str, intent: Any) -> Any:
        with bench.book.reading() as connection:
            state = connection.exec_driver_sql("SELECT state FROM attempts WHERE key = ?", (key,)).scalar()
        seen.append(str(state))
        return bench.host.put(key, intent)

    def ack(keys: list[str]) -> None:
        with bench.book.reading() as connection:
            for key in keys:
                question = "SELECT count(*) FROM results JOIN attempts ON id = attempt_id WHERE key = ?"
                assert connection.exec_driver_sql(question, (key,)).scalar() == 1
        seen.append("acknowledged")
        bench.host.ack(keys)

    bench.dispatcher(Wrapped(bench.host, put=put, ack=ack)).run()
    assert seen == ["intended"] * 8 + ["acknowledged"]


def test_a_stop_finishes_the_running_shot_and_takes_back_the_waiting_one(new_bench: NewBench) -> None:
    """After a stop the rig holds nothing, nothing is lost, and the same night goes on to its end."""
    bench = new_bench()

    def stop_at_third(now: Any) -> None:
        bench.stop = now.sent >= 3

    dispatcher = bench.dispatcher()
    dispatcher._progress = stop_at_third
    assert dispatcher.run() == "stopped"
    assert bench.book.counts(bench.night.id).keys() == {"done", "withdrawn"}
    assert bench.book.night().why == "stopped by hand"
    bench.stop = False
    assert bench.dispatcher().run() == "done"
    columns = bench.columns()
    done = columns["state"] == "done"
    assert columns["position"][done].tolist() == list(range(8))
    assert set(bench.rig.played.values()) == {1}


def test_failed_shots_come_again_at_the_end_in_a_new_revision(new_bench: NewBench) -> None:
    """The order never changes: what failed is appended, with its own switch states and a packet of its own."""
    failing = {1, 6}

    def act(shot: Shot) -> Result:
        if shot.ordinal - 1 in failing:
            raise ShotFailed("the lock was lost")
        return Result(atoms_a=1.0, atoms_b=1.0)

    bench = new_bench(rig=BenchRig(act))
    assert bench.dispatcher().run() == "done"
    columns = bench.columns()
    assert columns["state"].tolist() == ["done", "failed", *["done"] * 4, "failed", "done", "done", "done"]
    # the collar stands far at the end of the order, so the far shot comes first
    assert columns["shot"][8:].tolist() == [6, 1]
    assert columns["switch_collar"][8:].tolist() == [-1, 1]
    assert set(columns["packet"][8:]).isdisjoint(columns["packet"][:8])
    assert columns["unit"][8:].tolist() == [1, 0]
    assert [row.why for row in bench.book.revisions(bench.night.id)] == ["booked", "2 missed shots again"]


def test_a_shot_that_never_works_is_given_up(new_bench: NewBench) -> None:
    """Three tries a shot and no more: the night ends."""

    def act(shot: Shot) -> Result:
        raise ShotFailed("never")

    bench = new_bench(rig=BenchRig(act))
    assert bench.dispatcher().run() == "done"
    assert bench.book.counts(bench.night.id) == {"failed": 24}


def test_a_slow_switch_keeps_its_dwell(new_bench: NewBench) -> None:
    """Shots that fail at once run ahead of the order; the collar still stays its half minute."""
    bench = new_bench(shots=4)
    moved: list[tuple[float, str]] = []

    def act(shot: Shot) -> Result:
        moved.append(((shot.started - EVENING) / timedelta(seconds=1), shot.switches["collar"]))
        return Result(atoms_a=1.0, atoms_b=1.0)

    bench.rig._act = act
    bench.dispatcher().run()
    first_far = next(at for at, state in moved if state == "far")
    # two shots near: 25 + 10 + 10 = 45 s, longer than the dwell of 30 s; nothing has to wait
    assert first_far == pytest.approx(45.0, abs=1e-5)


def test_a_slow_switch_waits_for_its_dwell(new_bench: NewBench) -> None:
    """With a dwell longer than the shots before the move, the move waits for it."""
    bench = new_bench(shots=4)
    details = dict(bench.book.requests(bench.night.id)[0].details)
    details["switches"]["collar"]["dwell_s"] = 200.0
    with bench.book.writing() as connection:
        connection.exec_driver_sql("UPDATE requests SET details = ?", (json.dumps(details),))
    bench.dispatcher().run()
    columns = bench.columns()
    first_far = columns["start_s"][columns["switch_collar"] == -1][0]
    assert first_far - 25.0 == pytest.approx(200.0, abs=1e-5)  # the move itself comes 25 s before its shot


def test_a_window_that_ends_ends_the_night(new_bench: NewBench) -> None:
    """No shot is sent that could not end within the night."""
    bench = new_bench(length_s=60.0)
    assert bench.dispatcher().run() == "over"
    columns = bench.columns()
    assert (columns["start_s"] + columns["duration_s"]).max() <= 60.0
    assert bench.book.night().why == "the night's window has ended"
    assert len(columns["key"]) == 3  # 25 s of settling and three shots of 10 s; a fourth would end at 65 s


def test_every_intent_has_a_latest_start_within_the_night(new_bench: NewBench) -> None:
    """An orphaned queue can never fire after the night."""
    bench = new_bench(length_s=200.0)
    latest: list[Any] = []

    def put(key: str, intent: Any) -> Any:
        latest.append(intent.start_by + timedelta(seconds=intent.duration_s))
        return bench.host.put(key, intent)

    bench.dispatcher(Wrapped(bench.host, put=put)).run()
    assert len(latest) == 8
    assert max(latest) <= EVENING + timedelta(seconds=200)


def test_a_rig_that_restarts_loses_what_it_held_and_nothing_more(new_bench: NewBench) -> None:
    """Lost shots are recorded as lost, their keys never sent again, and their shots measured at the end."""
    bench = new_bench(journal=True)
    asked = 0

    def ask(key: str, wait_s: float = 0.0) -> Any:
        nonlocal asked
        asked += 1
        if asked == 4:
            bench.host.close()
            wrapped._host = bench.boot_rig()
        return bench.host.ask(key, wait_s)

    wrapped = Wrapped(bench.host, ask=ask)
    assert bench.dispatcher(wrapped).run() == "done"
    counts = bench.book.counts(bench.night.id)
    assert counts == {"done": 8, "lost": 2}
    columns = bench.columns()
    assert sorted(columns["shot"][columns["state"] == "done"]) == list(range(8))
    assert max(bench.rig.played.values()) == 1


def test_a_rig_beyond_whose_limits_the_plan_goes_is_sent_nothing(new_bench: NewBench) -> None:
    """Limits that shrank since booking are noticed before the first shot, with position, setting and limit."""

    class Smaller(BenchRig):
        def describe(self) -> Capabilities:
            return Capabilities(
                rig="bench rig",
                settings={
                    "hold": SettingRange(unit="ms", low=100.0, high=5000.0),
                    "readout": SettingRange(unit="deg", low=None, high=None),
                },
                switches={"collar": ("far", "near")},
            )

    bench = new_bench(rig=Smaller())
    with pytest.raises(LimitExceeded, match=r"position 0 .* hold = 7000 ms .* 100 to 5000 ms; 8 positions"):
        bench.dispatcher().run()
    assert not bench.rig.played
    assert bench.book.night().state == "stopped"


@pytest.mark.parametrize(
    ("settings", "switches", "said"),
    [
        ({"readout": ("deg", None)}, {"collar": ("near", "far")}, "no setting hold; it has: readout"),
        ({"readout": ("deg", None), "hold": ("m", 1.0)}, {"collar": ("near", "far")}, "hold is in s here and in m"),
        ({"readout": ("deg", None), "hold": ("s", 90.0)}, {"collar": ("in", "out")}, r"it has: collar \(in / out\)"),
        ({"readout": ("deg", None), "hold": ("s", 90.0)}, {}, "it has: none"),
    ],
)
def test_a_rig_that_does_not_know_the_plan_is_sent_nothing(
    new_bench: NewBench, settings: dict[str, Any], switches: dict[str, tuple[str, str]], said: str
) -> None:
    """A setting or switch that the rig lacks, or means otherwise, is said with what it has."""

    class Other(BenchRig):
        def describe(self) -> Capabilities:
            ranges = {name: SettingRange(unit=unit, low=None, high=high) for name, (unit, high) in settings.items()}
            return Capabilities(rig="bench rig", settings=ranges, switches=switches)

    bench = new_bench(rig=Other())
    with pytest.raises(InputError, match=said):
        bench.dispatcher().run()
    assert not bench.rig.played


def test_a_rig_that_is_not_ready_is_waited_for_with_its_reason(new_bench: NewBench) -> None:
    """A busy rig pauses the night, is said in words, and the night goes on by itself."""
    bench = new_bench()
    bench.rig.why_not = "the laser is out of lock"
    moves = 0

    def move_clock(until: Any) -> Any:
        nonlocal moves
        moves += 1
        if moves == 3:
            bench.rig.why_not = None
        return bench.host.move_clock(until)

    assert bench.dispatcher(Wrapped(bench.host, move_clock=move_clock)).run() == "done"
    assert any("out of lock" in words for words in bench.said)
    assert bench.book.counts(bench.night.id) == {"done": 8}


def test_a_refused_shot_stops_the_night_with_the_rigs_words(new_bench: NewBench) -> None:
    """What the rig will not play is for a person to look at: nothing is skipped silently."""

    class Objects(BenchRig):
        def objection(self, settings: Any, switches: Any) -> str | None:
            return "not with this collar" if switches["collar"] == "far" else None

    bench = new_bench(rig=Objects())
    with pytest.raises(RigRefused, match="not with this collar"):
        bench.dispatcher().run()
    night = bench.book.night()
    assert night.state == "stopped"
    assert "not with this collar" in (night.why or "")
    assert night.next_position == 4


def test_a_bad_answer_is_kept_aside_and_asked_for_again(new_bench: NewBench) -> None:
    """Nonsense is quarantined as it came; the truth is asked for again and nothing is guessed."""
    bench = new_bench()
    asked = 0

    def ask(key: str, wait_s: float = 0.0) -> Any:
        nonlocal asked
        asked += 1
        if asked in (2, 3, 6):
            raise RigMalformed("the rig speaks in tongues", answer=f"<html>{asked}")
        return bench.host.ask(key, wait_s)

    assert bench.dispatcher(Wrapped(bench.host, ask=ask)).run() == "done"
    assert bench.book.counts(bench.night.id) == {"done": 8}
    with bench.book.reading() as connection:
        kept = connection.exec_driver_sql("SELECT answer FROM quarantine ORDER BY id").scalars().all()
    assert kept == ["<html>2", "<html>3", "<html>6"]


def test_shots_of_somebody_else_are_taken_back_and_recorded(new_bench: NewBench) -> None:
    """A waiting shot that this logbook does not know (a restored backup) never fires unseen."""
    bench = new_bench()
    for key in ("stranger-1", "stranger-2"):  # one runs at once, one waits
        bench.host.put(key, make_intent(bench.host.describe(), driver="before", epoch=0))
    assert bench.dispatcher().run() == "done"
    found = [line for line in bench.book.audit() if line["what"] == "stranger_found"]
    assert [(line["detail"]["report"]["key"], line["detail"]["withdrawn"]) for line in found] == [
        ("stranger-1", False),
        ("stranger-2", True),
    ]
    assert "stranger-2" not in bench.rig.played


def test_a_dispatcher_that_was_taken_over_stops(new_bench: NewBench) -> None:
    """Whoever drives with an older epoch is refused by logbook and rig; the newer one runs the night."""
    bench = new_bench()
    taken_over = False

    def put(key: str, intent: Any) -> Any:
        nonlocal taken_over
        if len(bench.rig.played) >= 2 and not taken_over:
            taken_over = True
            bench.stop = True
            bench.dispatcher().run()  # takes over, and is asked to stop at once
            bench.stop = False
        return bench.host.put(key, intent)

    with pytest.raises((LogbookConflict, RigFenced)):
        bench.dispatcher(Wrapped(bench.host, put=put)).run()
    assert taken_over
    assert bench.dispatcher().run() == "done"
    assert max(bench.rig.played.values()) == 1
    columns = bench.columns()
    assert sorted(columns["shot"][columns["state"] == "done"]) == list(range(8))
