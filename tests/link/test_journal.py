"""The journal: torn last lines, damage, what a new boot takes over, and a disk that refuses."""

from datetime import timedelta
from pathlib import Path

import pytest

from planner.errors import InputError, RigFenced, RigNotNow, RigRefused
from planner.link import journal as journal_module
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.journal import Journal, read_journal
from planner.link.messages import new_key
from tests.link.rigs import EVENING, BenchRig, make_intent


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "folder" / "rig.jsonl"


def events(path: Path) -> list[str]:
    return [fact["event"] for fact in read_journal(path)]


def test_facts_are_on_disk_before_the_answer(path: Path) -> None:
    """After every call that promises something, another reader of the file finds the fact."""
    host = Host(BenchRig(), SimulatedClock(EVENING), journal=Journal(path))
    assert events(path) == ["boot"]
    first, second = new_key(), new_key()
    host.put(first, make_intent(host.describe()))
    assert events(path)[1:] == ["accept", "start"]
    host.put(second, make_intent(host.describe()))
    host.withdraw(second)
    assert events(path)[3:] == ["accept", "withdraw"]
    report = host.ask(first, 25.0)
    *_, last = read_journal(path)
    assert last["event"] == "end"
    assert last["report"] == report.document()
    host.close()


def test_the_start_is_on_disk_before_the_shot_plays(path: Path) -> None:
    """When the adapter is called, the journal already says so: a crash during the shot leaves its trace."""
    seen: list[list[str]] = []
    rig = BenchRig()
    rig.play = lambda shot: seen.append(events(path)) or BenchRig().play(shot)  # type: ignore[func-returns-value, method-assign]
    host = Host(rig, SimulatedClock(EVENING), journal=Journal(path))
    host.put(new_key(), make_intent(host.describe()))
    assert seen == [["boot", "accept", "start"]]
    host.close()


def test_a_new_boot_goes_on_where_the_journal_ends(path: Path) -> None:
    """Ordinals, time and the fence continue over a power cut; shots are forgotten, and late ones refused (412)."""
    old = Host(BenchRig(), SimulatedClock(EVENING), journal=Journal(path))
    key, late = new_key(), new_key()
    intent = make_intent(old.describe(), epoch=7, duration_s=90.0)
    old.put(key, intent)
    journal = Journal(path)
    assert journal.recovered.latest == EVENING + timedelta(seconds=90)  # the shot that the cut interrupted
    new = Host(BenchRig(), SimulatedClock(journal.recovered.latest), journal=journal)
    assert new.describe().boot != old.describe().boot
    assert new.ask(key).state == "unknown"
    assert new.since(0).shots == []
    for repeated in (key, late):
        with pytest.raises(RigRefused) as caught:
            new.put(repeated, intent)
        assert caught.value.status == 412
    with pytest.raises(RigFenced):
        new.put(new_key(), make_intent(new.describe(), epoch=6))
    fresh = new_key()
    new.put(fresh, make_intent(new.describe(), epoch=8))
    assert new.ask(fresh).ordinal == 2
    old.close()
    new.close()


@pytest.mark.parametrize("cut", range(1, 40, 6))
def test_a_torn_last_line_is_dropped(path: Path, cut: int) -> None:
    """A line that a crash cut short was never promised to anyone; the next boot writes on after the whole ones."""
    Host(BenchRig(), SimulatedClock(EVENING), journal=Journal(path)).close()
    whole = path.read_bytes()
    path.write_bytes(whole + whole[:cut])
    assert events(path) == ["boot"]
    Host(BenchRig(), SimulatedClock(EVENING), journal=Journal(path)).close()
    assert events(path) == ["boot", "boot"]


@pytest.mark.parametrize(
    "line", [b"nonsense\n", b"[]\n", b"{}\n", b'{"event": "accept"}\n', b'{"event": 1, "event": 2}\n']
)
def test_damage_in_the_middle_is_named(path: Path, line: bytes) -> None:
    """Any other damage stops the rig with the place of the damage: a judge with gaps is none."""
    Host(BenchRig(), SimulatedClock(EVENING), journal=Journal(path)).close()
    whole = path.read_bytes()
    path.write_bytes(whole + line + whole)
    with pytest.raises(InputError, match=r"rig\.jsonl"):
        Journal(path)
    assert path.read_bytes() == whole + line + whole


def test_a_disk_that_refuses_starts_nothing(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without a journal there is no start: the rig says that it is not ready, and why; what ran is still told."""
    rig = BenchRig()
    host = Host(rig, SimulatedClock(EVENING), journal=Journal(path))
    running, waiting, refused = new_key(), new_key(), new_key()
    host.put(running, make_intent(host.describe()))
    host.put(waiting, make_intent(host.describe()))

    def full(_: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(journal_module.os, "fsync", full)
    assert host.ask(running, 25.0).state == "done"
    assert not host.now().ready
    assert "No space left" in str(host.now().why)
    assert host.ask(waiting, 25.0).state == "waiting"
    with pytest.raises(RigNotNow, match="No space left"):
        host.put(refused, make_intent(host.describe()))
    assert host.ask(refused).state == "unknown"
    assert rig.played == {running: 1}
    host.close()
