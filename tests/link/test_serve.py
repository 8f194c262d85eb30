"""A rig as a process: it answers, ends in good order, and after a kill comes back as one that has forgotten."""

import os
import signal
import socket
import subprocess
import sys
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from planner.errors import InputError, LinkError, RigRefused, RigUnreachable
from planner.link.client import RigClient
from planner.link.journal import read_journal
from planner.link.messages import new_key
from planner.link.serve import check_bind, listen
from tests.link.rigs import make_intent

ROOT = Path(__file__).resolve().parent.parent.parent
END_WITHIN_S = 30.0


class Server:
    """A running bench rig."""

    def __init__(self, journal: Path, *, clock: str = "simulated", port: int = 0, bind: str = "127.0.0.1") -> None:
        command = [sys.executable, "-m", "tests.link.bench_server", clock, str(journal), str(port), bind]
        self.process = subprocess.Popen(
            command, cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.PIPE
        )
        assert self.process.stdout is not None
        self.url = self.process.stdout.readline().decode().strip()

    @property
    def port(self) -> int:
        return int(self.url.rsplit(":", 1)[1])

    def ended(self) -> tuple[int, str]:
        """Exit code and messages, once it has ended."""
        _, said = self.process.communicate(timeout=END_WITHIN_S)
        return self.process.returncode, said.decode()


@contextmanager
def running(journal: Path, **options: object) -> Iterator[Server]:
    server = Server(journal, **options)  # type: ignore[arg-type]
    try:
        yield server
    finally:
        server.process.kill()  # which is nothing once it has ended
        server.process.wait(END_WITHIN_S)
        for pipe in (server.process.stdin, server.process.stdout, server.process.stderr):
            if pipe is not None:
                pipe.close()


@pytest.mark.parametrize("how", ["stdin", "SIGTERM", "SIGINT"])
def test_a_rig_ends_in_good_order(tmp_path: Path, how: str) -> None:
    """Asked to end, even while a program waits at it, the rig ends with status 0 and says nothing."""
    if how != "stdin" and os.name != "posix":
        pytest.skip("no such signals between processes on this system")
    with running(tmp_path / "rig.jsonl", clock="real") as server, RigClient(server.url) as rig:
        key = new_key()
        rig.put(key, make_intent(rig.describe(), duration_s=0.05))
        assert rig.ask(key, 20.0).state == "done"
        if how == "stdin":
            assert server.process.stdin is not None
            server.process.stdin.close()
            server.process.stdin = None
        else:
            server.process.send_signal(getattr(signal, how))
        code, said = server.ended()
        assert code == 0
        # on a loaded machine asyncio's own SIGINT handling may cancel the web server's wait for its shutdown message,
        # which that server then logs; nothing is lost by it, and nothing else may be said
        assert said == "" or (how == "SIGINT" and said.rstrip().endswith("asyncio.exceptions.CancelledError"))
        with pytest.raises(LinkError):
            rig.now()


def test_a_waiting_program_is_answered_when_the_rig_ends(tmp_path: Path) -> None:
    """A long wait does not hold the rig's end up, and is answered with what is known."""
    import threading

    with running(tmp_path / "rig.jsonl", clock="real") as server, RigClient(server.url) as rig:
        key = new_key()
        rig.put(key, make_intent(rig.describe(), duration_s=0.8))
        assert server.process.stdin is not None
        threading.Timer(0.2, server.process.stdin.close).start()
        report = rig.ask(key, 60.0)
        assert report.state in ("running", "done")
        server.process.stdin = None
        assert server.ended() == (0, "")
        ends = [fact for fact in read_journal(tmp_path / "rig.jsonl") if fact["event"] == "end"]
        assert [fact["key"] for fact in ends] == [key]  # the shot under way was finished


def test_a_killed_rig_comes_back_having_forgotten(tmp_path: Path) -> None:
    """After kill -9 the same address answers with a new boot: the shot is unknown, its late repeat refused."""
    journal = tmp_path / "rig.jsonl"
    with running(journal) as server, RigClient(server.url) as rig:
        old = rig.describe()
        key = new_key()
        intent = make_intent(old)
        rig.put(key, intent)
        server.process.kill()
        server.process.communicate(timeout=END_WITHIN_S)
        with pytest.raises(LinkError):
            rig.ask(key)
        with pytest.raises(RigUnreachable):
            rig.ask(key)
        with running(journal, port=server.port) as again:
            assert again.url == server.url
            new = rig.describe()
            assert new.boot != old.boot
            assert rig.ask(key).state == "unknown"
            with pytest.raises(RigRefused) as caught:
                rig.put(key, intent)
            assert caught.value.status == 412
            fresh = new_key()
            rig.put(fresh, make_intent(new))
            report = rig.ask(fresh, 20.0)
            assert (report.state, report.ordinal) == ("done", 2)
    starts = Counter(fact["key"] for fact in read_journal(journal) if fact["event"] == "start")
    assert starts == {key: 1, fresh: 1}


def test_kills_at_many_moments_never_start_a_key_twice(tmp_path: Path) -> None:
    """Whatever is cut off by a kill, the journal stays sound and no key has two starts or two ends."""
    journal = tmp_path / "rig.jsonl"
    port = 0
    sent = []
    for round_number in range(4):
        with running(journal, port=port) as server, RigClient(server.url) as rig:
            port = server.port
            description = rig.describe()
            for shot in range(2 + round_number):
                key = new_key()
                sent.append((key, make_intent(description, epoch=round_number)))
                rig.put(*sent[-1])
                if shot > round_number:
                    server.process.kill()
                    break
                rig.ask(key, 20.0)
            else:
                server.process.kill()
        with running(journal, port=port) as server, RigClient(server.url) as rig:
            for key, intent in sent:
                with pytest.raises(LinkError):
                    rig.put(key, intent)
    facts = list(read_journal(journal))
    for event in ("accept", "start", "end"):
        assert set(Counter(fact["key"] for fact in facts if fact["event"] == event).values()) <= {1}
    assert [fact["ordinal"] for fact in facts if fact["event"] == "accept"] == list(range(1, len(sent) + 1))


def test_a_taken_port_is_the_users_error(tmp_path: Path) -> None:
    """A port in use, or none at all, is named in one line."""
    with socket.socket() as other:
        other.bind(("127.0.0.1", 0))
        other.listen()
        port = other.getsockname()[1]
        with pytest.raises(InputError, match=rf"127\.0\.0\.1 port {port}"):
            listen("127.0.0.1", port)
        with running(tmp_path / "rig.jsonl", port=port) as server:
            code, said = server.ended()
            assert code == 2
            assert f"port {port}" in said
    with pytest.raises(InputError, match="port 70000"):
        listen("127.0.0.1", 70000)


def test_small_answers_leave_at_once() -> None:
    """The listening socket names TCP: only then does asyncio switch off the gathering of small packets."""
    # source: CPython Lib/asyncio/base_events.py, _set_nodelay: asks for sock.proto == IPPROTO_TCP
    with listen("127.0.0.1", 0) as listener:
        assert listener.proto == socket.IPPROTO_TCP


@pytest.mark.parametrize("bind", ["0.0.0.0", "192.0.2.1", "::"])
def test_other_computers_only_with_a_token(bind: str) -> None:
    """An address that others can reach needs a token; loopback does not."""
    with pytest.raises(InputError, match="token"):
        check_bind(bind, None)
    check_bind(bind, "token")
    for inside in ("127.0.0.1", "::1", "localhost"):
        check_bind(inside, None)
    with pytest.raises(InputError, match="no address"):
        check_bind("nowhere.example", "token")
