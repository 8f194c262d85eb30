"""What the rig link promises, call by call: one suite for the host itself, its HTTP coat, and a real socket."""

import threading
import time
from collections.abc import Iterator
from datetime import timedelta

import pytest
import uvicorn

from planner.errors import RigFenced, RigNotNow, RigRefused
from planner.link.client import RigClient
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.messages import Intent, new_key
from planner.link.server import rig_app
from tests.link.inprocess import AppTransport
from tests.link.rigs import EVENING, BenchRig, make_intent

Link = Host | RigClient


class Bench:
    """A rig, and a way to talk to it."""

    def __init__(self, rig: BenchRig, link: Link) -> None:
        self.rig = rig
        self.link = link

    def intent(self, **changes: object) -> Intent:
        return make_intent(self.link.describe(), **changes)

    def accepted(self, **changes: object) -> str:
        key = new_key()
        assert self.link.put(key, self.intent(**changes)) == "accepted"
        return key


@pytest.fixture(params=["host", "http", "socket"])
def bench(request: pytest.FixtureRequest) -> Iterator[Bench]:
    rig = BenchRig()
    host = Host(rig, SimulatedClock(EVENING))
    if request.param == "host":
        yield Bench(rig, host)
    elif request.param == "http":
        with RigClient("http://rig", transport=AppTransport(rig_app(host))) as client:
            yield Bench(rig, client)
    else:
        server = uvicorn.Server(uvicorn.Config(rig_app(host), port=0, log_level="warning", timeout_graceful_shutdown=1))
        thread = threading.Thread(target=server.run)
        thread.start()
        while not server.started:
            time.sleep(0.005)
        port = server.servers[0].sockets[0].getsockname()[1]
        try:
            with RigClient(f"http://127.0.0.1:{port}") as client:
                yield Bench(rig, client)
        finally:
            server.should_exit = True
            thread.join()


def refusal(bench: Bench, key: str, **changes: object) -> RigRefused:
    with pytest.raises(RigRefused) as caught:
        bench.link.put(key, bench.intent(**changes))
    return caught.value


def test_a_rig_describes_itself(bench: Bench) -> None:
    """The description holds all that a program needs to plan for this rig."""
    description = bench.link.describe()
    assert description.link == 1
    assert description.rig == "bench rig"
    assert description.clock == "simulated"
    assert description.settings["hold"].unit == "s"
    assert (description.settings["hold"].low, description.settings["hold"].high) == (0.1, 75.0)
    assert description.settings["readout"].low is None
    assert description.switches == {"collar": ("near", "far")}
    assert description.readings == {"vacuum": "Pa"}
    assert description.slots == 2
    assert description.boot == bench.link.now().boot


def test_time_stands_still_until_asked(bench: Bench) -> None:
    """A simulated clock does not run by itself, and readiness comes with its reason."""
    assert bench.link.now().now == EVENING
    assert bench.link.now().uptime_s == 0.0
    assert bench.link.now().ready
    bench.rig.why_not = "the laser is unlocked"
    assert not bench.link.now().ready
    assert bench.link.now().why == "the laser is unlocked"


def test_a_shot_runs_and_is_told(bench: Bench) -> None:
    """Waiting for a shot moves simulated time to its end; the result comes as measured, null as null."""
    key = bench.accepted()
    assert bench.link.ask(key).state == "running"
    report = bench.link.ask(key, 25.0)
    assert report.state == "done"
    assert report.ended
    assert report.ordinal == 1
    assert report.started == EVENING
    assert report.finished == EVENING + timedelta(seconds=10)
    assert (report.started_uptime_s, report.finished_uptime_s) == (0.0, 10.0)
    assert report.atoms is not None
    assert (report.atoms.a, report.atoms.b) == (12034.5, None)
    assert report.detection is not None
    assert (report.detection.background, report.detection.saturated) == (3.0, None)
    assert report.applied == {"hold": 7.0, "readout": 90.0, "collar": "near"}
    assert report.readings == {"vacuum": 2e-9}
    assert report.flags == ["unlocked"]
    assert bench.rig.played == {key: 1}


def test_shots_run_in_the_order_accepted(bench: Bench) -> None:
    """Asking for the second shot first still runs the first one first, and no two overlap."""
    first, second = bench.accepted(), bench.accepted(duration_s=5.0)
    assert bench.link.ask(second).state == "waiting"
    late = bench.link.ask(second, 25.0)
    early = bench.link.ask(first)
    assert early.finished == late.started == EVENING + timedelta(seconds=10)
    assert (early.ordinal, late.ordinal) == (1, 2)


def test_the_same_attempt_twice_is_one(bench: Bench) -> None:
    """A repeated PUT is known (200), while it runs, when it is done, and after its result was forgotten."""
    key = bench.accepted()
    assert bench.link.put(key, bench.intent()) == "known"
    bench.link.ask(key, 25.0)
    assert bench.link.put(key, bench.intent()) == "known"
    bench.link.ack([key])
    assert bench.link.put(key, bench.intent()) == "known"
    assert bench.rig.played == {key: 1}


def test_the_dispatcher_that_takes_over_repeats_the_same_attempt(bench: Bench) -> None:
    """Driver and epoch are not part of what is asked: a new driver's repeat has the same digest."""
    key = bench.accepted()
    assert bench.link.put(key, bench.intent(driver="dispatcher-b", epoch=2)) == "known"


def test_a_key_with_another_digest_is_409(bench: Bench) -> None:
    """One key never stands for two different shots."""
    key = bench.accepted()
    assert refusal(bench, key, duration_s=11.0).status == 409
    bench.link.ask(key, 25.0)
    bench.link.ack([key])
    assert refusal(bench, key, duration_s=11.0).status == 409


def test_a_late_put_after_withdrawal_is_410(bench: Bench) -> None:
    """Withdrawing a key that never came leaves word, so that the late request is refused for good."""
    key = new_key()
    assert bench.link.ask(key).state == "unknown"
    bench.link.withdraw(key)
    bench.link.withdraw(key)
    assert bench.link.ask(key).state == "withdrawn"
    assert refusal(bench, key).status == 410
    bench.link.ack([key])
    assert refusal(bench, key).status == 410
    assert bench.rig.played == {}


def test_another_description_is_412(bench: Bench) -> None:
    """A shot made for another state of the rig is refused."""
    assert refusal(bench, new_key(), description="yesterday's").status == 412


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"settings": {"hold": 80.0}}, "hold = 80"),
        ({"settings": {"hold": 0.05}}, "hold = 0.05"),
        ({"settings": {"holt": 1.0}}, "no setting holt here; there are: hold, readout"),
        ({"switches": {"collar": "gone"}}, "near and far, not gone"),
        ({"switches": {"collars": "near"}}, "no switch collars here; there are: collar"),
        ({"settings": {"readout": 13.0}}, "no such fringe"),
    ],
)
def test_what_the_rig_cannot_do_is_422_and_says_why(bench: Bench, changes: dict[str, object], words: str) -> None:
    """Limits, names, states and the adapter's own objections are refused with a reason."""
    refused = refusal(bench, new_key(), **changes)
    assert refused.status == 422
    assert words in refused.why


def test_a_full_rig_accepts_nothing(bench: Bench) -> None:
    """Beyond its slots the rig says "not now"; the end of a shot frees one."""
    first = bench.accepted()
    bench.accepted()
    key = new_key()
    with pytest.raises(RigNotNow, match="slots") as caught:
        bench.link.put(key, bench.intent())
    assert caught.value.full
    assert caught.value.retry_after_s > 0
    assert bench.link.ask(key).state == "unknown"
    bench.link.ask(first, 25.0)
    assert bench.link.put(key, bench.intent()) == "accepted"


def test_a_rig_that_is_not_ready_accepts_and_starts_nothing(bench: Bench) -> None:
    """Not ready: 503 for what comes, and what waits does not start."""
    first, second = bench.accepted(), bench.accepted()
    bench.link.ask(first)
    bench.rig.why_not = "the laser is unlocked"
    with pytest.raises(RigNotNow, match="the laser is unlocked") as caught:
        bench.link.put(new_key(), bench.intent())
    assert not caught.value.full
    assert bench.link.ask(second, 25.0).state == "waiting"
    assert bench.link.ask(first).state == "done"
    bench.rig.why_not = None
    assert bench.link.ask(second, 25.0).state == "done"


def test_an_older_epoch_is_fenced(bench: Bench) -> None:
    """Once a newer dispatcher was seen, the older one is refused, and so is a second one of the same epoch."""
    bench.accepted(epoch=5)
    with pytest.raises(RigFenced, match="epoch 5"):
        bench.link.put(new_key(), bench.intent(epoch=4))
    with pytest.raises(RigFenced, match="dispatcher-a"):
        bench.link.put(new_key(), bench.intent(epoch=5, driver="dispatcher-b"))
    bench.accepted(epoch=6, driver="dispatcher-b")
    with pytest.raises(RigFenced):
        bench.link.put(new_key(), bench.intent(epoch=5))


def test_withdrawing_a_waiting_shot(bench: Bench) -> None:
    """A waiting shot can be taken back and never runs; a running or ended one cannot (409)."""
    first, second = bench.accepted(), bench.accepted()
    bench.link.withdraw(second)
    assert bench.link.ask(second, 25.0).state == "withdrawn"
    for _ in range(2):
        with pytest.raises(RigRefused) as caught:
            bench.link.withdraw(first)
        assert caught.value.status == 409
        bench.link.ask(first, 25.0)
    bench.link.ack([first])
    with pytest.raises(RigRefused):
        bench.link.withdraw(first)
    assert bench.rig.played == {first: 1}
    assert refusal(bench, second).status == 410


def test_reconciliation_in_one_call(bench: Bench) -> None:
    """`since` tells all that is known after an ordinal, waiting ones too; acknowledged ones are gone."""
    keys = [bench.accepted()]
    bench.link.ask(keys[0], 25.0)
    keys += [bench.accepted(), bench.accepted()]
    known = bench.link.since(0)
    assert known.boot == bench.link.describe().boot
    assert [(shot.key, shot.state) for shot in known.shots] == list(
        zip(keys, ["done", "running", "waiting"], strict=True)
    )
    assert [shot.key for shot in bench.link.since(1).shots] == keys[1:]
    bench.link.ack(keys)
    assert [shot.key for shot in bench.link.since(0).shots] == keys[1:]


def test_not_before_holds_a_shot_back(bench: Bench) -> None:
    """A shot starts no earlier than it may, and the ones behind it keep their place."""
    first = bench.accepted(not_before=EVENING + timedelta(minutes=5))
    second = bench.accepted()
    assert bench.link.ask(first).state == "waiting"
    assert bench.link.ask(second, 25.0).started == EVENING + timedelta(minutes=5, seconds=10)
    assert bench.link.ask(first).started == EVENING + timedelta(minutes=5)


def test_start_by_keeps_an_old_shot_from_firing(bench: Bench) -> None:
    """A shot whose turn comes after start_by ends as failed and is never played; at the moment itself it still is."""
    just = bench.accepted()
    in_time = bench.accepted(start_by=EVENING + timedelta(seconds=10))
    bench.link.ask(just, 25.0)
    too_late = bench.accepted(start_by=EVENING + timedelta(seconds=12))
    report = bench.link.ask(too_late, 25.0)
    assert report.state == "failed"
    assert report.why is not None
    assert "too late" in report.why
    assert report.started is None
    assert bench.link.ask(in_time, 25.0).state == "done"
    assert bench.rig.played == {just: 1, in_time: 1}
    already = bench.accepted(start_by=EVENING)
    assert bench.link.ask(already).state == "failed"


def test_idle_time_moves_to_the_next_event(bench: Bench) -> None:
    """Moving the clock stops at the first start, end or expiry on the way; it never runs back (422)."""
    bench.accepted(not_before=EVENING + timedelta(minutes=1))
    far = EVENING + timedelta(hours=1)
    assert bench.link.move_clock(far).now == EVENING + timedelta(minutes=1)
    assert bench.link.move_clock(far).now == EVENING + timedelta(minutes=1, seconds=10)
    assert bench.link.move_clock(far).now == far
    assert bench.link.now().uptime_s == 3600.0
    with pytest.raises(RigRefused, match="never runs back") as caught:
        bench.link.move_clock(EVENING)
    assert caught.value.status == 422


def test_settling_counts_in_the_duration(bench: Bench) -> None:
    """`duration_s` is the whole of a shot: settling and play."""
    report = bench.link.ask(bench.accepted(settle_s=25.0, duration_s=35.0), 25.0)
    assert report.finished_uptime_s == 35.0


def test_waiting_for_an_unknown_key_answers_at_once(bench: Bench) -> None:
    """An unknown key has no end to wait for."""
    assert bench.link.ask(new_key(), 25.0).state == "unknown"
    assert bench.link.now().now == EVENING
