"""The client: foreign errors are translated, every status has its meaning, bad answers are kept and never believed."""

import inspect
import json
import socket
from collections.abc import Callable, Iterator

import httpx
import pytest

from planner.errors import (
    InputError,
    LinkError,
    RigFenced,
    RigMalformed,
    RigNotNow,
    RigRefused,
    RigUnknown,
    RigUnreachable,
)
from planner.link import client as client_module
from planner.link.client import RigClient, translate
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.messages import ShotReport, new_key
from planner.link.wire import LARGEST_ANSWER
from tests.link.rigs import EVENING, BenchRig, make_intent

Call = Callable[[RigClient], object]
INTENT = make_intent(Host(BenchRig(), SimulatedClock(EVENING)).describe())
KEY = new_key()
CALLS: dict[str, Call] = {
    "describe": lambda rig: rig.describe(),
    "now": lambda rig: rig.now(),
    "put": lambda rig: rig.put(KEY, INTENT),
    "ask": lambda rig: rig.ask(KEY, 25.0),
    "since": lambda rig: rig.since(0),
    "withdraw": lambda rig: rig.withdraw(KEY),
    "ack": lambda rig: rig.ack([KEY]),
    "move_clock": lambda rig: rig.move_clock(EVENING),
}


def foreign_exceptions() -> list[type[Exception]]:
    found = [value for _, value in inspect.getmembers(httpx, inspect.isclass) if issubclass(value, Exception)]
    return sorted(found, key=lambda value: value.__name__)


def made(kind: type[Exception]) -> Exception:
    """An instance of an exception class of httpx, whatever its constructor asks for."""
    request = httpx.Request("GET", "http://rig/link")
    if issubclass(kind, httpx.HTTPStatusError):
        return kind("words", request=request, response=httpx.Response(500, request=request))
    if kind in (httpx.StreamConsumed, httpx.ResponseNotRead, httpx.RequestNotRead, httpx.StreamClosed):
        return kind()
    return kind("words")


def raising(error: Exception) -> RigClient:
    def handler(_: httpx.Request) -> httpx.Response:
        raise error

    return RigClient("http://rig", transport=httpx.MockTransport(handler))


def answering(*answers: httpx.Response | bytes) -> RigClient:
    queue: Iterator[httpx.Response | bytes] = iter(answers)

    def handler(_: httpx.Request) -> httpx.Response:
        answer = next(queue)
        return httpx.Response(200, content=answer) if isinstance(answer, bytes) else answer

    return RigClient("http://rig", transport=httpx.MockTransport(handler))


def test_httpx_has_the_exceptions_we_know() -> None:
    """The list under test is not empty by some accident."""
    assert {httpx.ConnectError, httpx.ReadTimeout, httpx.InvalidURL} <= set(foreign_exceptions())


@pytest.mark.parametrize("call", CALLS)
@pytest.mark.parametrize("kind", foreign_exceptions(), ids=lambda kind: kind.__name__)
def test_no_foreign_error_crosses_the_border(kind: type[Exception], call: str) -> None:
    """Whatever the HTTP library raises, a caller sees a LinkError with the original as its cause."""
    error = made(kind)
    with raising(error) as rig, pytest.raises(LinkError) as caught:
        CALLS[call](rig)
    assert caught.value.__cause__ is error


@pytest.mark.parametrize("kind", foreign_exceptions(), ids=lambda kind: kind.__name__)
def test_unreachable_means_that_nothing_was_sent(kind: type[Exception]) -> None:
    """Only errors from before the first byte are "unreachable"; all others leave the attempt unknown or unreadable."""
    before = {"ConnectError", "ConnectTimeout", "PoolTimeout", "UnsupportedProtocol", "ProxyError", "InvalidURL"}
    translated = translate(made(kind), "http://rig")
    assert isinstance(translated, RigUnreachable) == (kind.__name__ in before)
    assert isinstance(translated, (RigUnreachable, RigUnknown, RigMalformed))


@pytest.mark.parametrize(
    ("status", "expected"),
    [
        (400, RigRefused),
        (401, RigRefused),
        (403, RigFenced),
        (404, RigRefused),
        (408, RigUnknown),
        (409, RigRefused),
        (410, RigRefused),
        (412, RigRefused),
        (413, RigRefused),
        (422, RigRefused),
        (429, RigNotNow),
        (500, RigUnknown),
        (502, RigUnknown),
        (503, RigNotNow),
        (504, RigUnknown),
    ],
)
@pytest.mark.parametrize("call", CALLS)
def test_every_status_has_its_meaning(status: int, expected: type[LinkError], call: str) -> None:
    """Refused, fenced, not now and unknown are told apart, with the rig's own words."""
    rig = answering(httpx.Response(status, json={"why": "because of the moon"}))
    with rig, pytest.raises(LinkError, match="because of the moon") as caught:
        CALLS[call](rig)
    assert type(caught.value) is expected
    if isinstance(caught.value, RigRefused):
        assert (caught.value.status, caught.value.why) == (status, "because of the moon")
    if isinstance(caught.value, RigNotNow):
        assert caught.value.full == (status == 429)


@pytest.mark.parametrize("call", CALLS)
@pytest.mark.parametrize("status", [202, 206, 301, 304])
def test_an_undefined_success_is_malformed(status: int, call: str) -> None:
    """A status that the link does not define is never taken for a yes, and no redirect is followed."""
    rig = answering(httpx.Response(status, json={}, headers={"location": "http://elsewhere/"}))
    with rig, pytest.raises(RigMalformed, match=str(status)):
        CALLS[call](rig)


@pytest.mark.parametrize("call", ["describe", "now", "ask", "since", "move_clock"])
@pytest.mark.parametrize(
    "body",
    [
        b"",
        b"<html>it works</html>",
        b"[]",
        b"null",
        b"{}",
        b'{"key": 1}',
        b'{"state": NaN}',
        b"\xff",
        b"[" * 100_000,
        b'{"boot": "b", "boot": "c"}',
    ],
)
def test_nonsense_is_kept_aside(body: bytes, call: str) -> None:
    """A body that is no message raises RigMalformed and keeps what came, shortened."""
    with answering(body) as rig, pytest.raises(RigMalformed) as caught:
        CALLS[call](rig)
    assert len(caught.value.answer) <= 400
    assert caught.value.answer[:10] == body.decode("utf-8", "replace")[:10]


def test_an_answer_for_another_key_is_malformed() -> None:
    """A rig that mixes up shots is not believed."""
    other = ShotReport(key=new_key(), state="unknown")
    with answering(other.model_dump_json().encode()) as rig, pytest.raises(RigMalformed, match=KEY):
        rig.ask(KEY)


def test_a_list_from_before_the_ordinal_is_malformed() -> None:
    """A rig that answers another question than the one asked is not believed; the order in the list does not matter."""
    shots = [{"key": new_key(), "state": "waiting", "ordinal": number} for number in (9, 7)]
    body = json.dumps({"boot": "b", "shots": shots}).encode()
    with answering(body, body) as rig:
        assert [shot.ordinal for shot in rig.since(6).shots] == [7, 9]
        with pytest.raises(RigMalformed, match="after 7"):
            rig.since(7)


@pytest.mark.parametrize(
    ("headers", "seconds"),
    [
        ({"retry-after": "7"}, 7.0),
        ({"retry-after": "0"}, 0.0),
        ({"retry-after": "999999"}, 3600.0),
        ({"retry-after": "soon"}, 1.0),
        ({"retry-after": "-5"}, 1.0),
        ({"retry-after": "nan"}, 1.0),
        ({}, 1.0),
        # source: RFC 9110 section 10.2.3 allows a date, in the form of its section 5.6.7
        ({"retry-after": "Fri, 31 Dec 1999 23:59:59 GMT", "date": "Fri, 31 Dec 1999 23:59:29 GMT"}, 30.0),
        ({"retry-after": "Fri, 31 Dec 1999 23:59:59 GMT"}, 1.0),
    ],
)
def test_retry_after(headers: dict[str, str], seconds: float) -> None:
    """The rig's Retry-After is followed where it makes sense and bounded where it does not."""
    with answering(httpx.Response(503, headers=headers)) as rig, pytest.raises(RigNotNow) as caught:
        rig.put(KEY, INTENT)
    assert caught.value.retry_after_s == seconds


def test_a_flood_is_cut_off() -> None:
    """An endless answer stops at a bound instead of filling the memory."""

    def flood() -> Iterator[bytes]:
        for _ in range(2 * LARGEST_ANSWER // 2**20):
            yield b" " * 2**20

    with answering(httpx.Response(200, content=flood())) as rig, pytest.raises(RigMalformed, match="more than"):
        rig.now()


def test_a_trickle_ends_when_its_time_is_up(monkeypatch: pytest.MonkeyPatch) -> None:
    """An answer that never stops arriving in small parts is given up: each part alone would satisfy a read timeout."""
    ticks = iter(range(0, 1000, 4))
    monkeypatch.setattr(client_module.time, "monotonic", lambda: float(next(ticks)))
    trickle = (b" " for _ in range(200))
    with answering(httpx.Response(200, content=trickle)) as rig, pytest.raises(RigUnknown, match="time was up"):
        rig.now()
    assert next(trickle, None) is not None


def test_nobody_listens() -> None:
    """A refused connection is "unreachable", and says what to look at."""
    with socket.create_server(("127.0.0.1", 0)) as closed:
        port = closed.getsockname()[1]
    with RigClient(f"http://127.0.0.1:{port}") as rig, pytest.raises(RigUnreachable, match="nothing was sent"):
        rig.put(KEY, INTENT)


def test_a_silent_rig_is_unknown() -> None:
    """A rig that takes the request and says nothing leaves the attempt unknown."""
    with socket.create_server(("127.0.0.1", 0)) as silent:
        address = f"http://127.0.0.1:{silent.getsockname()[1]}"
        with RigClient(address, answer_within_s=0.1) as rig, pytest.raises(RigUnknown, match="did not answer in time"):
            rig.put(KEY, INTENT)


@pytest.mark.parametrize(
    "address", ["", "rig", "ftp://rig", "http://", "http://a:b@rig", "http://rig?x=1", "http://rig:x"]
)
def test_a_wrong_address_is_the_users_error(address: str) -> None:
    """An address that cannot be one is refused before anything is sent."""
    with pytest.raises(InputError, match=r"no rig address.*http://127"):
        RigClient(address)


@pytest.mark.parametrize("token", ["", " a", "a\nb", "ü"])
def test_a_wrong_token_is_the_users_error(token: str) -> None:
    """A token that no header can carry is refused, and not repeated in the message."""
    with pytest.raises(InputError, match="token"):
        RigClient("http://rig", token=token)


@pytest.mark.parametrize("key", ["", "short", "../../etc", "a b c d e f", "x" * 65, "k" * 16 + "\n"])
def test_a_wrong_key_is_never_sent(key: str) -> None:
    """A key is part of an address: only letters, digits, - and _ get there."""
    with answering() as rig, pytest.raises(InputError, match="key"):
        rig.ask(key)
