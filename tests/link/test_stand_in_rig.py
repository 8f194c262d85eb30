"""The stand-in's adapter: SI towards the model, the rig's units towards the link, pace on a real clock."""

import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import timedelta
from types import SimpleNamespace
from typing import Any

import pytest

from planner.link.adapter import Capabilities, Shot, ShotFailed
from planner.link.clocks import RealClock, SimulatedClock
from planner.link.host import Host
from planner.link.messages import SettingRange, new_key
from planner.link.player import Player
from planner.link.stand_in.rig import REMEMBERED, Past, StandInRig
from tests.link.rigs import EVENING, make_intent

ABLE = Capabilities(
    rig="stand-in",
    settings={
        "hold": SettingRange(unit="s", low=0.1, high=75.0),
        "readout": SettingRange(unit="deg", low=None, high=None),
        "split_time": SettingRange(unit="us", low=50.0, high=5000.0),
    },
    switches={"collar": ("near", "far")},
    readings={"vacuum": "Pa"},
)


@dataclass
class Recorder:
    """A model that keeps what it was asked."""

    asked: list[tuple[dict[str, float], dict[str, str], float, int, tuple[Past, ...]]] = field(default_factory=list)

    def shot(
        self,
        settings_si: Mapping[str, float],
        switches: Mapping[str, str],
        start_s: float,
        ordinal: int,
        history: Sequence[Past],
    ) -> Any:
        self.asked.append((dict(settings_si), dict(switches), start_s, ordinal, tuple(history)))
        return SimpleNamespace(
            atoms_a=5.0, atoms_b=None, background=1.0, saturated=0.0, readings={"vacuum": 1e-9}, flags=["unlocked"]
        )


def test_the_model_is_asked_in_si_and_told_the_past() -> None:
    """Degrees and microseconds become radians and seconds; time counts from the origin; earlier shots are handed on."""
    model = Recorder()
    host = Host(StandInRig(model, ABLE, origin=EVENING - timedelta(hours=1), paced=False), SimulatedClock(EVENING))
    settings = {"hold": 7.0, "readout": 90.0, "split_time": 340.0}
    for _ in range(2):
        key = new_key()
        host.put(key, make_intent(host.describe(), settings=settings))
        report = host.ask(key, 25.0)
    (first, switches, start_s, ordinal, past), (*_, second_start_s, second_ordinal, second_past) = model.asked
    # source: pi/2 radians are 90 degrees; SI brochure 9th edition, table 8
    assert first == pytest.approx({"hold": 7.0, "readout": 1.5707963267948966, "split_time": 340e-6}, rel=1e-15)
    assert (switches, start_s, ordinal, past) == ({"collar": "near"}, 3600.0, 1, ())
    assert (second_start_s, second_ordinal) == (3610.0, 2)
    assert second_past == (Past(start_s=3600.0, duration_s=10.0, settings_si=first),)
    assert report.applied == {**settings, "collar": "near"}
    assert report.atoms is not None
    assert (report.atoms.a, report.atoms.b) == (5.0, None)
    assert (report.readings, report.flags) == ({"vacuum": 1e-9}, ["unlocked"])


def test_the_past_is_bounded() -> None:
    """A night of shots does not make each shot slower than the one before."""
    model = Recorder()
    host = Host(StandInRig(model, ABLE, origin=EVENING, paced=False), SimulatedClock(EVENING))
    for _ in range(REMEMBERED + 5):
        key = new_key()
        host.put(key, make_intent(host.describe()))
        host.ask(key, 25.0)
        host.ack([key])
    past = model.asked[-1][-1]
    assert len(past) == REMEMBERED
    assert past[-1].start_s == 10.0 * (REMEMBERED + 3)


def test_a_real_shot_takes_its_time() -> None:
    """On a real clock a shot lasts as long as it says."""
    rig = StandInRig(Recorder(), ABLE, origin=EVENING, paced=True)
    host = Host(rig, RealClock())
    player = Player(host, rig)
    player.start()
    key = new_key()
    host.put(key, make_intent(host.describe(), duration_s=0.05))
    report = host.ask(key, 20.0)
    player.stop(20.0)
    assert report.finished_uptime_s is not None
    assert report.started_uptime_s is not None
    assert report.finished_uptime_s - report.started_uptime_s >= 0.05


def test_ending_cuts_a_long_shot_short() -> None:
    """When the program ends, a minute-long shot does not hold it up: it fails with the reason."""
    rig = StandInRig(Recorder(), ABLE, origin=EVENING, paced=True)
    shot = Shot(
        key=new_key(),
        ordinal=1,
        settings={"hold": 60.0},
        switches={},
        settle_s=0.0,
        duration_s=60.0,
        timeline={},
        started=EVENING,
    )
    threading.Timer(0.05, rig.close).start()
    with pytest.raises(ShotFailed, match="cut short"):
        rig.play(shot)
