"""The stand-in rig as users start it: a process with a profile, a seed and a journal."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

from planner.cli.app import run
from planner.errors import LinkError, RigUnreachable
from planner.link.client import RigClient
from planner.link.journal import read_journal
from planner.link.messages import Description, Intent, ShotReport, new_key
from planner.link.stand_in.process import start_stand_in

ROOT = Path(__file__).resolve().parent.parent.parent
PROFILE = ROOT / "sequences" / "gallery-stand-in.toml"


def intent(description: Description, **changes: object) -> Intent:
    """A ten-second hold with every setting in the middle of its range."""
    settings = {
        name: 0.0 if limits.low is None or limits.high is None else (limits.low + limits.high) / 2
        for name, limits in description.settings.items()
    }
    fields: dict[str, object] = {
        "driver": "dispatcher",
        "epoch": 1,
        "description": description.description,
        "settings": settings,
        "switches": {name: states[0] for name, states in description.switches.items()},
        "settle_s": 0.0,
        "duration_s": 60.0,
    }
    return Intent.sealed(**(fields | changes))


def night(rig: RigClient, shots: int) -> list[ShotReport]:
    description = rig.describe()
    reports = []
    for _ in range(shots):
        key = new_key()
        rig.put(key, intent(description))
        reports.append(rig.ask(key, 25.0))
        rig.ack([key])
    return reports


def test_a_night_on_the_stand_in(tmp_path: Path) -> None:
    """Twenty shots give atoms in both ports, an hour of rig time passes at once, and the journal has it all."""
    with start_stand_in(PROFILE, journal=tmp_path / "rig.jsonl", seed=7) as process, RigClient(process.url) as rig:
        reports = night(rig, 20)
        assert rig.now().uptime_s == 1200.0
        journal = process.journal
    assert {report.state for report in reports} == {"done"}
    assert all(report.atoms is not None and report.atoms.a is not None for report in reports)
    assert [report.ordinal for report in reports] == list(range(1, 21))
    ends = [fact["report"] for fact in read_journal(journal) if fact["event"] == "end"]
    assert ends == [report.document() for report in reports]


def test_the_same_seed_gives_the_same_night(tmp_path: Path) -> None:
    """Keys differ, atoms do not; another seed gives other atoms."""
    counts = []
    for number, seed in enumerate((3, 3, 4)):
        journal = tmp_path / f"{number}.jsonl"
        with start_stand_in(PROFILE, journal=journal, seed=seed) as process, RigClient(process.url) as rig:
            counts.append([report.atoms for report in night(rig, 5)])
    assert counts[0] == counts[1]
    assert counts[0] != counts[2]


def test_a_killed_stand_in_comes_back_at_its_address(tmp_path: Path) -> None:
    """After a kill the same journal and port give a new boot that goes on counting, later in rig time."""
    journal = tmp_path / "rig.jsonl"
    with start_stand_in(PROFILE, journal=journal) as process, RigClient(process.url) as rig:
        before = night(rig, 2)
        old = rig.describe()
        process.kill()
        with pytest.raises(LinkError):
            rig.now()
        with start_stand_in(PROFILE, journal=journal, port=process.port) as again:
            assert again.url == process.url
            assert rig.describe().boot != old.boot
            after = night(rig, 1)
    assert after[0].ordinal == 3
    assert before[-1].finished is not None
    assert after[0].started is not None
    assert after[0].started >= before[-1].finished


def test_the_token_and_the_start_are_passed_on(tmp_path: Path) -> None:
    """With a token file the rig asks for that token."""
    token_file = tmp_path / "token"
    token_file.write_text("a-token-of-some-length\n", encoding="ascii")
    with start_stand_in(PROFILE, journal=tmp_path / "rig.jsonl", token_file=token_file) as process:
        with RigClient(process.url) as rig, pytest.raises(LinkError, match="401"):
            rig.describe()
        with RigClient(process.url, "a-token-of-some-length") as rig:
            assert rig.describe().clock == "simulated"


def test_a_stand_in_that_cannot_start_says_so(tmp_path: Path) -> None:
    """A missing profile is an error of the one who starts it, not a wait without end."""
    with pytest.raises(RigUnreachable, match="did not start"):
        start_stand_in(tmp_path / "nothing.toml", journal=tmp_path / "rig.jsonl")


def test_the_first_line_is_the_address(tmp_path: Path) -> None:
    """What a script reads: one JSON line with the address, and status 0 when its standard input closes."""
    command = [sys.executable, "-m", "planner", "rig", "stand-in", "--profile", str(PROFILE)]
    command += ["--journal", str(tmp_path / "rig.jsonl"), "--until-stdin-closes"]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, stdin=subprocess.DEVNULL, timeout=60, check=False)
    (line,) = done.stdout.decode().splitlines()
    assert json.loads(line)["address"].startswith("http://127.0.0.1:")
    assert (done.returncode, done.stderr) == (0, b"")


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--bind", "0.0.0.0"], "token"),
        (["--bind", "gallery"], "no address"),
        (["--start", "tomorrow"], "--start tomorrow"),
        (["--token-file", "nowhere"], "nowhere"),
    ],
)
def test_bad_options_are_named(
    options: list[str], words: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """Each wrong option ends with status 2 and its name, before anything listens."""
    journal = tmp_path / "rig.jsonl"
    assert run(["rig", "stand-in", "--profile", str(PROFILE), "--journal", str(journal), *options]) == 2
    assert words in capsys.readouterr().err
    assert not journal.exists()


def test_a_journal_that_is_none_is_named(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A folder, or a file that is no journal, is refused and left as it was."""
    for wrong in (tmp_path, tmp_path / "notes.txt"):
        if not wrong.exists():
            wrong.write_text("shopping list\n", encoding="utf-8")
        assert run(["rig", "stand-in", "--profile", str(PROFILE), "--journal", str(wrong)]) == 2
        assert str(wrong) in capsys.readouterr().err
    assert (tmp_path / "notes.txt").read_text(encoding="utf-8") == "shopping list\n"
