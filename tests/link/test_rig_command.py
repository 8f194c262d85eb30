"""`nightfringe rig describe`: what a rig says of itself, for people and for programs."""

import json
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
import uvicorn

from planner.cli.app import run
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.serve import listen
from planner.link.server import rig_app
from tests.link.rigs import EVENING, BenchRig

TOKEN = "a-token-of-some-length"


@pytest.fixture(scope="module")
def address() -> Iterator[str]:
    app = rig_app(Host(BenchRig(), SimulatedClock(EVENING)), token=TOKEN)
    server = uvicorn.Server(uvicorn.Config(app, log_level="warning"))
    with listen("127.0.0.1", 0) as listener:
        thread = threading.Thread(target=server.run, kwargs={"sockets": [listener]})
        thread.start()
        while not server.started:
            time.sleep(0.005)
        yield f"http://127.0.0.1:{listener.getsockname()[1]}"
        server.should_exit = True
        thread.join()


@pytest.fixture
def token_file(tmp_path: Path) -> str:
    path = tmp_path / "token"
    path.write_text(f"{TOKEN}\n", encoding="ascii")
    return str(path)


def test_json_holds_description_and_time(address: str, token_file: str, capsys: pytest.CaptureFixture[str]) -> None:
    """`--json` prints one object with the rig's own two answers, and nothing else."""
    assert run(["rig", "describe", address, "--token-file", token_file, "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    assert said["description"]["rig"] == "bench rig"
    assert said["description"]["settings"]["hold"] == {"unit": "s", "low": 0.1, "high": 75.0}
    assert said["now"]["now"] == "2026-12-01T20:00:00.000000Z"


def test_people_see_every_setting_switch_and_reading(
    address: str, token_file: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """The plain form names all of them, with units and limits."""
    assert run(["rig", "describe", address, "--token-file", token_file]) == 0
    said = capsys.readouterr().out
    for words in (
        "bench rig, simulated clock, ready",
        "2026-12-01 20:00:00 UTC",
        "hold",
        "0.1",
        "75",
        "readout",
        "deg",
    ):
        assert words in said
    assert "switch collar: near or far" in said
    assert "reading vacuum in Pa" in said


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (None, "cannot be read"),
        (b"\n", "empty first line"),
        (b"\xfc\n", "plain letters at byte 0"),
        (b"a\tb\n", "characters"),
    ],
)
def test_a_token_file_that_holds_none(
    address: str, tmp_path: Path, content: bytes | None, words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    """A missing, empty or odd token file is named, with exit code 2 and no traceback."""
    path = tmp_path / "other-token"
    if content is not None:
        path.write_bytes(content)
    assert run(["rig", "describe", address, "--token-file", str(path)]) == 2
    assert words in capsys.readouterr().err


def test_errors_of_the_link_end_with_three(address: str, capsys: pytest.CaptureFixture[str]) -> None:
    """A rig that asks for a token, and one that is not there, are told apart in one line each."""
    assert run(["rig", "describe", address]) == 3
    assert "bearer token" in capsys.readouterr().err
    with listen("127.0.0.1", 0) as closed:
        gone = f"http://127.0.0.1:{closed.getsockname()[1]}"
    assert run(["rig", "describe", gone]) == 3
    assert "nothing was sent" in capsys.readouterr().err
    assert run(["rig", "describe", "gallery"]) == 2
    assert "no rig address" in capsys.readouterr().err
