"""Small nights for tests: a plan of a few shots, a logbook in a folder, hands whose time does not pass by itself."""

import itertools
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, cast

import numpy as np

from planner.design.running_order import Kind, RunningOrder
from planner.link.client import RigClient
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.journal import Journal
from planner.link.messages import new_key
from planner.logbook import Logbook, NightRow, open_logbook
from planner.logbook.booking import NewNight, NewRequest
from planner.night.contact import Hands
from planner.night.dispatcher import Dispatcher
from planner.night.held import Progress
from planner.sequence.table import ShotTable
from tests.link.rigs import EVENING, BenchRig

NOW_US = int(EVENING.timestamp()) * 1_000_000
DETAILS: Mapping[str, Any] = {
    "settings": {"hold": {"unit": "s", "settle_s": 0.0}, "readout": {"unit": "deg", "settle_s": 0.0}},
    "switches": {"collar": {"states": ["near", "far"], "settle_s": 25.0, "dwell_s": 30.0}},
}


def small_request(shots: int = 8) -> NewRequest:
    """Shots of 10 s in packets of four, the collar near for the first half and far for the second."""
    row = np.arange(shots)
    phase = (row % 4) * np.pi / 2
    table = ShotTable(
        settings={"hold": np.full(shots, 7.0), "readout": phase},
        switches={"collar": np.where(row < shots // 2, 1, -1).astype(np.int8)},
        hold_s=np.full(shots, 7.0),
        phase_rad=phase,
        duration_s=np.full(shots, 10.0),
        cell=row // 4,
        packet=row // 4,
        repeat=np.zeros(shots, dtype=np.int64),
        timeline=row % 2,
    )
    return NewRequest(
        title="small",
        sequence_text="# a small night\n",
        table=table,
        timelines=[{"tick_s": 1e-6, "lines": {}}, {"tick_s": 1e-6, "lines": {"lattice": [[0, 9.0]]}}],
        goal="curve",
        seed=3,
        details=DETAILS,
    )


def small_order(shots: int = 8) -> RunningOrder:
    """The rows in their own order, a settle wait where the collar moves."""
    row = np.arange(shots)
    settle_s = np.where(row == shots // 2, 25.0, 0.0)
    busy_s = settle_s + 10.0
    return RunningOrder(
        request=np.zeros(shots, dtype=np.int64),
        shot=row,
        kind=np.full(shots, int(Kind.MEASURE)),
        start_s=np.cumsum(busy_s) - busy_s,
        settle_s=settle_s,
        duration_s=np.full(shots, 10.0),
        packet=row // 4,
        unit=row // 4,
        flip=np.ones(shots, dtype=np.int8),
        seed=3,
        figures={"additive_mean": 0.01},
    )


def small_night(shots: int = 8, *, name: str = "small night", length_s: float = 3600.0) -> NewNight:
    return NewNight(
        name=name,
        rig="bench rig",
        rig_text="# a bench rig\n",
        link="http://127.0.0.1:1",
        length_s=length_s,
        requests=[small_request(shots)],
        order=small_order(shots),
    )


@dataclass(kw_only=True)
class Bench:
    """A logbook with one booked night, a rig that can restart, and dispatchers made on demand."""

    folder: Path
    shots: int = 8
    length_s: float = 3600.0
    rig: BenchRig = field(default_factory=BenchRig)
    journal: bool = False
    stop: bool = False
    now_us: int = NOW_US
    said: list[str] = field(default_factory=list)
    told: list[Progress] = field(default_factory=list)
    keys: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.book: Logbook = open_logbook(str(self.folder / "night.sqlite"), create=True)
        self.night: NightRow = self.book.book_night(
            small_night(self.shots, length_s=self.length_s), now_us=NOW_US, who="test"
        )
        self.boots = itertools.count(1)
        self.host = self.boot_rig()

    def boot_rig(self) -> Host:
        """A rig that has forgotten everything but its journal."""
        journal = Journal(self.folder / "rig.jsonl") if self.journal else None
        start = EVENING if journal is None else max(EVENING, journal.recovered.latest or EVENING)
        self.host = Host(self.rig, SimulatedClock(start, f"boot-{next(self.boots)}"), journal=journal)
        return self.host

    def close(self) -> None:
        """Close logbook and journal."""
        self.host.close()
        self.book.close()

    def hands(self) -> Hands:
        def key() -> str:
            self.keys.append(new_key())
            return self.keys[-1]

        def sleep(seconds: float) -> None:
            self.now_us += max(1, round(seconds * 1e6))

        return Hands(
            utc_us=lambda: self.now_us,
            monotonic_s=lambda: self.now_us / 1e6,
            sleep=sleep,
            new_key=key,
            stopping=lambda: self.stop,
            say=self.said.append,
        )

    def dispatcher(self, client: object | None = None) -> Dispatcher:
        """A new dispatcher, as a program that has just started."""
        self.now_us += 1_000_000
        return Dispatcher(
            self.book,
            self.book.night(self.night.id),
            cast(RigClient, client or self.host),
            self.hands(),
            owner="dispatcher",
            progress=self.told.append,
        )

    def columns(self) -> dict[str, Any]:
        return self.book.night_columns(self.night.id)
