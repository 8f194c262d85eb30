"""How quickly the logbook answers and the dispatcher drives: each figure beside its reference of the same run."""

import sqlite3
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from planner.link.client import RigClient
from planner.logbook import Logbook, open_logbook
from planner.night.running import now_us, run_night
from tests.link.rigs import make_intent
from tests.night.killing import Rig, start_program
from tests.night.nights import small_night

SHOTS = 500
ROUNDS = 3
MANY = 1_000_000
SOME = 100_000


def rows() -> Iterator[dict[str, Any]]:
    """Shots per second against bare calls and commits; columns of a long night; going on with a large logbook."""
    with tempfile.TemporaryDirectory() as folder:
        yield from dispatching(Path(folder))
    with tempfile.TemporaryDirectory() as folder:
        yield columns(Path(folder))
    with tempfile.TemporaryDirectory() as folder:
        yield going_on(Path(folder))


def dispatching(folder: Path) -> Iterator[dict[str, Any]]:
    """A night through HTTP and durable commits, in turn with a bare loop of the same calls and one committed row."""
    rig = Rig(folder)
    nights, bare = [], []
    try:
        for number in range(ROUNDS):
            with open_logbook(str(folder / "night.sqlite"), create=True) as book, RigClient(rig.address) as client:
                night = book.book_night(
                    small_night(SHOTS, name=str(number), length_s=1e6), now_us=now_us(), who="bench"
                )
                began = time.perf_counter()
                run_night(book, night, client)
                nights.append(time.perf_counter() - began)
            with RigClient(rig.address) as client:
                bare.append(bare_loop(client, folder / "bare.sqlite", number))
    finally:
        rig.kill()
    took, reference = statistics.median(nights), statistics.median(bare)
    yield row(f"a night of {SHOTS} shots, simulated clock", took, "s", "<= 15", took <= 15, reference=None)
    ratio = took / reference
    yield row("the same against bare calls and commits", took, "s", "<= 1.5 x", ratio <= 1.5, reference=reference)


def bare_loop(client: RigClient, place: Path, number: int) -> float:
    """The same calls and one committed row a shot, two shots at the rig, acknowledged sixteen at a time."""
    rig = client.describe()
    connection = sqlite3.connect(place, isolation_level=None)
    for setting in ("journal_mode=WAL", "synchronous=FULL"):
        connection.execute(f"PRAGMA {setting}").fetchall()
    connection.execute("CREATE TABLE IF NOT EXISTS shots (key TEXT PRIMARY KEY, answer TEXT) STRICT")
    intents = [make_intent(rig, epoch=now_us() // 1_000_000, driver=str(number)) for _ in range(SHOTS)]
    keys = [f"bare-{number}-{i:06d}" for i in range(SHOTS)]
    began = time.perf_counter()
    client.put(keys[0], intents[0])
    ended: list[str] = []
    for i, key in enumerate(keys):
        if i + 1 < SHOTS:
            client.put(keys[i + 1], intents[i + 1])
        report = client.ask(key, 2.0)
        connection.execute("INSERT INTO shots VALUES (?, ?)", (key, report.model_dump_json()))
        ended.append(key)
        if len(ended) == 16:
            client.ack(ended)
            ended = []
    took = time.perf_counter() - began
    connection.close()
    return took


def columns(folder: Path) -> dict[str, Any]:
    """Reading a night of a hundred thousand attempts as columns."""
    with open_logbook(str(folder / "night.sqlite"), create=True) as book:
        night = book.book_night(small_night(SOME, length_s=1e7), now_us=now_us(), who="bench")
        fill(book, night.id, SOME)
        began = time.perf_counter()
        found = book.night_columns(night.id)
        took = time.perf_counter() - began
    ok = len(found["key"]) == SOME and took <= 3.0
    return row(f"a night of {SOME:,} attempts as columns", took, "s", "<= 3", ok, reference=None)


def going_on(folder: Path) -> dict[str, Any]:
    """From exec to the next shot at the rig, with a million attempts in the logbook, half of them in this night."""
    rig = Rig(folder)
    place = folder / "night.sqlite"
    times, bare = [], []
    try:
        with open_logbook(str(place), create=True) as book:
            first = book.book_night(small_night(MANY // 2, name="before", length_s=1e8), now_us=now_us(), who="bench")
            fill(book, first.id, MANY // 2)
            book.end_night(first.id, now_us=now_us(), who="bench", why="bench")
            night = book.book_night(small_night(MANY, length_s=1e8), now_us=now_us(), who="bench")
            fill(book, night.id, MANY // 2)
        for _ in range(ROUNDS):
            before = len(rig.journal.read_bytes())
            began = time.perf_counter()
            program = start_program(folder, rig.address)
            while b'"start"' not in rig.journal.read_bytes()[before:]:
                time.sleep(0.01)
            times.append(time.perf_counter() - began)
            program.kill()
            program.wait()
            began = time.perf_counter()
            subprocess.run([sys.executable, "-c", "import numpy, sqlalchemy.orm, httpx, pydantic"], check=True)
            bare.append(time.perf_counter() - began)
    finally:
        rig.kill()
    took, reference = statistics.median(times), statistics.median(bare)
    name = f"exec to the next shot, {MANY:,} attempts on record; reference: importing the libraries alone"
    return row(name, took, "s", "<= 2", took <= 2.0, reference=reference)


def fill(book: Logbook, night_id: int, count: int) -> None:
    """Attempts that are done, with results, without a rig."""
    request_id = book.requests(night_id)[0].id
    with book.writing() as connection:
        connection.exec_driver_sql(
            "WITH RECURSIVE row(p) AS (SELECT 0 UNION ALL SELECT p + 1 FROM row WHERE p + 1 < ?) "
            "INSERT INTO attempts (key, night_id, request_id, revision, position, try_number, state, epoch, digest, "
            "boot, ordinal, settle_s, intended_us, ended_us) "
            "SELECT printf('fill-%d-%d', ?, p), ?, ?, 1, p, 1, 'done', 1, 'd', 'boot-0', 0, 0.0, p, p FROM row",
            (count, night_id, night_id, request_id),
        )
        connection.exec_driver_sql(
            "INSERT INTO results SELECT id, 6000.0, 4000.0, 3.0, 0.0, position * 10000000, "
            "position * 10000000 + 9000000, position * 10.0, position * 10.0 + 9.0, '{}', "
            "'{\"vacuum\":2e-09}', '[]', NULL, 'a' FROM attempts "
            "WHERE night_id = ?",
            (night_id,),
        )
        connection.exec_driver_sql("UPDATE nights SET next_position = ? WHERE id = ?", (count, night_id))


def row(name: str, value: float, unit: str, bound: str, ok: bool, *, reference: float | None) -> dict[str, Any]:
    """One row of the table of figures."""
    ratio = None if reference is None else value / reference
    return {
        "name": name,
        "value": value,
        "unit": unit,
        "bound": bound,
        "reference": reference,
        "ratio": ratio,
        "ok": ok,
    }
