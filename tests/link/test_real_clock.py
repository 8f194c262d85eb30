"""Real time: the player's thread, waits that end with the shot, and adapters that misbehave."""

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import timedelta
from itertools import pairwise

import pytest

from planner.errors import RigRefused
from planner.link.adapter import Result, Shot, ShotFailed
from planner.link.clocks import RealClock, SimulatedClock
from planner.link.host import Host
from planner.link.messages import new_key
from planner.link.player import Player
from tests.link.rigs import EVENING, BenchRig, make_intent

LONG_S = 20.0  # a wait that only ends early because something happened


@contextmanager
def playing(act: Callable[[Shot], Result] | None = None) -> Iterator[tuple[BenchRig, Host]]:
    rig = BenchRig(act)
    host = Host(rig, RealClock())
    player = Player(host, rig)
    player.start()
    try:
        yield rig, host
    finally:
        host.close()
        assert player.stop(LONG_S)


def test_shots_run_by_themselves_in_order() -> None:
    """On a real clock the queue runs without being asked, one shot at a time, in the order accepted."""
    with playing() as (rig, host):
        keys = [new_key() for _ in range(6)]
        for key in keys:
            host.put(key, make_intent(host.describe()))
            host.ask(key, LONG_S)
        reports = [host.ask(key) for key in keys]
        assert [report.state for report in reports] == ["done"] * 6
        assert list(rig.played) == keys
        for before, after in pairwise(reports):
            assert before.finished_uptime_s is not None
            assert after.started_uptime_s is not None
            assert before.finished_uptime_s <= after.started_uptime_s


def test_a_shot_under_way_is_running_and_cannot_be_withdrawn() -> None:
    """While the adapter plays, the host answers; the second shot waits behind it and may be taken back."""
    entered, leave = threading.Event(), threading.Event()

    def act(_: Shot) -> Result:
        entered.set()
        assert leave.wait(LONG_S)
        return Result(atoms_a=1.0, atoms_b=2.0)

    with playing(act) as (rig, host):
        first, second = new_key(), new_key()
        host.put(first, make_intent(host.describe()))
        host.put(second, make_intent(host.describe()))
        assert entered.wait(LONG_S)
        assert host.ask(first, 0.01).state == "running"
        with pytest.raises(RigRefused):
            host.withdraw(first)
        host.withdraw(second)
        leave.set()
        assert host.ask(first, LONG_S).state == "done"
        assert host.ask(second, LONG_S).state == "withdrawn"
        assert rig.played == {first: 1}


def test_a_late_shot_expires_by_itself() -> None:
    """A shot whose latest start passes while the rig is busy is ended without firing."""
    leave = threading.Event()

    def act(_: Shot) -> Result:
        assert leave.wait(LONG_S)
        return Result()

    with playing(act) as (rig, host):
        first, late = new_key(), new_key()
        host.put(first, make_intent(host.describe()))
        host.put(late, make_intent(host.describe(), start_by=host.now().now + timedelta(milliseconds=20)))
        threading.Timer(0.1, leave.set).start()
        host.ask(first, LONG_S)
        report = host.ask(late, LONG_S)
        assert report.state == "failed"
        assert "too late" in str(report.why)
        assert rig.played == {first: 1}


def test_not_before_is_kept() -> None:
    """A shot that may not start yet starts at its time, not at once."""
    with playing() as (_, host):
        key = new_key()
        start = host.now().now + timedelta(milliseconds=80)
        host.put(key, make_intent(host.describe(), not_before=start))
        report = host.ask(key, LONG_S)
        assert report.started is not None
        assert report.started >= start


def test_a_real_clock_cannot_be_moved() -> None:
    """Moving the clock is for simulated rigs alone."""
    with playing() as (_, host), pytest.raises(RigRefused, match="real") as caught:
        host.move_clock(host.now().now + timedelta(hours=1))
    assert caught.value.status == 422


def test_closing_ends_a_wait() -> None:
    """Whoever waits for a shot is answered when the rig's program ends."""
    with playing() as (_, host):
        key = new_key()
        host.put(key, make_intent(host.describe(), not_before=host.now().now + timedelta(hours=1)))
        threading.Timer(0.05, host.close).start()
        assert host.ask(key, LONG_S).state == "waiting"


def failing(error: Exception) -> Callable[[Shot], Result]:
    def act(_: Shot) -> Result:
        raise error

    return act


@pytest.mark.parametrize(
    ("act", "words"),
    [
        (failing(ShotFailed("the lattice laser lost its lock")), "lost its lock"),
        (failing(KeyError("dac3")), "KeyError: 'dac3'"),
        (lambda _: Result(atoms_a=float("nan"), atoms_b=1.0), "atoms_a|finite number"),
        (lambda _: Result(atoms_a="many", atoms_b=1.0), "valid number"),
        (lambda _: Result(readings={"vacuum": float("inf")}), "finite number"),
        (lambda _: None, "no result"),
    ],
)
@pytest.mark.parametrize("kind", ["real", "simulated"])
def test_a_misbehaving_adapter_fails_its_shot_and_nothing_else(
    act: Callable[[Shot], Result], words: str, kind: str
) -> None:
    """An error or a result that is none becomes a failed record with its reason; the next shot runs."""
    calls: list[str] = []

    def once(shot: Shot) -> Result:
        calls.append(shot.key)
        return act(shot) if len(calls) == 1 else Result(atoms_a=1.0, atoms_b=2.0)

    def check(host: Host) -> None:
        bad, good = new_key(), new_key()
        host.put(bad, make_intent(host.describe()))
        host.put(good, make_intent(host.describe()))
        report = host.ask(bad, LONG_S)
        assert report.state == "failed"
        assert any(word in str(report.why) for word in words.split("|"))
        assert report.started is not None
        assert host.ask(good, LONG_S).state == "done"

    if kind == "real":
        with playing(once) as (_, host):
            check(host)
    else:
        check(Host(BenchRig(once), SimulatedClock(EVENING)))


def test_uptime_does_not_follow_a_stepped_clock() -> None:
    """When the computer's time is set back, UTC shows it and uptime does not."""
    utc, seconds = [EVENING], [100.0]
    clock = RealClock(utc=lambda: utc[0], monotonic_s=lambda: seconds[0])
    seconds[0] += 5.0
    utc[0] -= timedelta(hours=1)
    assert clock.instant().uptime_s == 5.0
    assert clock.instant().utc == EVENING - timedelta(hours=1)


def test_a_simulated_clock_never_runs_back() -> None:
    """Moving to the past is an error, moving to now is not."""
    clock = SimulatedClock(EVENING)
    clock.move_to(EVENING)
    with pytest.raises(ValueError, match="run back"):
        clock.move_to(EVENING - timedelta(microseconds=1))
