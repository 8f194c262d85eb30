"""The HTTP coat: token, bounds, content types, and refusals that always say why."""

import json
from collections.abc import Callable, Iterator

import httpx
import pytest

from planner.errors import RigRefused
from planner.link.client import RigClient
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.messages import new_key
from planner.link.server import rig_app
from planner.link.wire import LARGEST_REQUEST
from tests.link.inprocess import AppTransport
from tests.link.rigs import EVENING, BenchRig, make_intent

TOKEN = "a-token-of-some-length"


@pytest.fixture
def host() -> Host:
    return Host(BenchRig(), SimulatedClock(EVENING))


@pytest.fixture
def http(host: Host) -> Iterator[httpx.Client]:
    with httpx.Client(base_url="http://rig", transport=AppTransport(rig_app(host))) as client:
        yield client


def why(answer: httpx.Response) -> str:
    assert answer.headers["content-type"] == "application/json"
    return str(answer.json()["why"])


def test_answers_hold_the_fields_of_the_link(host: Host, http: httpx.Client) -> None:
    """Name by name, an answer has what the reference table of the link says."""
    key = new_key()
    body = make_intent(host.describe()).document()
    assert set(http.get("/link").json()) == {
        "link", "rig", "boot", "description", "clock", "settings", "switches", "readings", "slots", "retains_s",
    }  # fmt: skip
    now = http.get("/link/now").json()
    assert now == {
        "now": "2026-12-01T20:00:00.000000Z",
        "uptime_s": 0.0,
        "boot": now["boot"],
        "ready": True,
        "why": None,
    }
    assert http.put(f"/link/shots/{key}", json=body).status_code == 201
    assert http.put(f"/link/shots/{key}", json=body).status_code == 200
    report = http.get(f"/link/shots/{key}?wait=25").json()
    assert set(report) == {
        "key", "state", "ordinal", "started", "finished", "started_uptime_s", "finished_uptime_s", "atoms", "detection",
        "applied", "readings", "flags", "why",
    }  # fmt: skip
    assert report["atoms"] == {"a": 12034.5, "b": None}
    assert report["started"] == "2026-12-01T20:00:00.000000Z"
    listed = http.get("/link/shots?after=0").json()
    assert set(listed) == {"boot", "shots"}
    assert listed["shots"] == [report]
    assert http.post("/link/ack", json={"keys": [key]}).status_code == 200
    assert http.post("/link/clock", json={"until": "2026-12-01T21:00:00Z"}).json()["uptime_s"] == 3600.0
    assert http.delete(f"/link/shots/{new_key()}").status_code == 200


def test_without_the_token_nothing_is_heard(host: Host) -> None:
    """Every call, describing included, needs the token; RFC 6750 says how it is asked for."""
    transport = AppTransport(rig_app(host, token=TOKEN))
    calls: list[Callable[[RigClient], object]] = [
        lambda rig: rig.describe(),
        lambda rig: rig.now(),
        lambda rig: rig.put(new_key(), make_intent(host.describe())),
        lambda rig: rig.ask(new_key()),
        lambda rig: rig.since(0),
        lambda rig: rig.withdraw(new_key()),
        lambda rig: rig.ack([]),
        lambda rig: rig.move_clock(EVENING),
    ]
    for call in calls:
        for token in (None, "wrong", TOKEN[:-1], TOKEN + "x"):
            with pytest.raises(RigRefused, match="bearer token") as caught:
                call(RigClient("http://rig", token=token, transport=transport))
            assert caught.value.status == 401
        call(RigClient("http://rig", token=TOKEN, transport=transport))
    answer = httpx.Client(base_url="http://rig", transport=transport).get("/link")
    assert answer.headers["www-authenticate"] == "Bearer"
    transport.close()


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"", "not JSON"),
        (b"{}", "digest: Field required"),
        (b"[]", "Input should be an object"),
        (b'{"digest": NaN}', "NaN"),
        (b'{"epoch": 1, "epoch": 2}', "twice"),
        (b'{"settings": {"hold": 1e999}}', "too large"),
        (b"\xff", "UTF-8"),
        (b"[" * 100_000, "nested too deeply"),
    ],
)
def test_a_body_that_is_no_intent_is_422(http: httpx.Client, host: Host, body: bytes, words: str) -> None:
    """Nothing of a bad body is used, and the answer says what is wrong."""
    key = new_key()
    answer = http.put(f"/link/shots/{key}", content=body, headers={"content-type": "application/json"})
    assert answer.status_code == 422
    assert words in why(answer)
    assert host.ask(key).state == "unknown"


def test_a_number_beyond_64_bits_in_a_sound_body_is_422(http: httpx.Client, host: Host) -> None:
    """A timeline with an integer that no rig could hold is refused."""
    document = make_intent(host.describe()).document() | {"timeline": {"tick": 10**30}}
    assert http.put(f"/link/shots/{new_key()}", json=document).status_code == 422


def test_bodies_are_bounded(http: httpx.Client) -> None:
    """A body beyond the bound is cut off while it comes (413), whether it says its length or not."""
    big = b" " * (LARGEST_REQUEST + 1)
    headers = {"content-type": "application/json"}
    assert http.put(f"/link/shots/{new_key()}", content=big, headers=headers).status_code == 413
    assert http.post("/link/ack", content=iter([big[:1000], big]), headers=headers).status_code == 413
    assert http.post("/link/ack", json={"keys": [new_key()] * 10_001}).status_code == 422


def test_only_json_is_taken(http: httpx.Client) -> None:
    """A form or a plain text, which a foreign web page could send unasked, is refused (415)."""
    for kind in ("text/plain", "application/x-www-form-urlencoded", ""):
        answer = http.post("/link/clock", content=b'{"until": "2026-12-01T21:00:00Z"}', headers={"content-type": kind})
        assert answer.status_code == 415
        assert "application/json" in why(answer)
    headers = {"content-type": "Application/JSON; charset=utf-8"}
    assert http.post("/link/ack", content=b'{"keys": []}', headers=headers).status_code == 200


@pytest.mark.parametrize(
    "path",
    [
        "/link/shots/short",
        "/link/shots/a%20b%20c%20d%20e",
        "/link/shots?after=-1",
        "/link/shots?after=one",
        "/link/shots?after=1.5",
        "/link/shots?after=1e400",
        f"/link/shots/{'k' * 16}?wait=nan",
        f"/link/shots/{'k' * 16}?wait=-1",
        f"/link/shots/{'k' * 16}?wait=1e9",
        f"/link/shots/{'k' * 16}?wait=",
    ],
)
def test_bad_questions_are_422(http: httpx.Client, path: str) -> None:
    """A key or number that cannot be one is refused with what was expected."""
    answer = http.get(path)
    assert answer.status_code == 422
    assert "expected" in why(answer) or "key has" in why(answer)


def test_other_paths_and_methods_say_why(http: httpx.Client) -> None:
    """Even what is not part of the link is answered in the link's form."""
    assert http.get("/").status_code == 404
    assert why(http.get("/link/nothing"))
    assert http.post("/link").status_code == 405
    assert why(http.post("/link"))


def test_not_now_says_when(http: httpx.Client, host: Host) -> None:
    """429 and 503 come with Retry-After in whole seconds."""
    document = make_intent(host.describe()).document()
    for expected in (201, 201, 429):
        answer = http.put(f"/link/shots/{new_key()}", json=document)
        assert answer.status_code == expected
    assert int(answer.headers["retry-after"]) >= 1


def test_a_fault_of_the_host_is_500_in_the_links_form(
    http: httpx.Client, host: Host, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A programming error inside answers 500, which every client reads as "unknown, ask", and shows no innards."""

    def broken() -> None:
        raise ZeroDivisionError("innards")

    monkeypatch.setattr(host, "now", broken)
    answer = http.get("/link/now")
    assert answer.status_code == 500
    assert json.loads(answer.content) == {"why": "the rig's program failed (ZeroDivisionError)"}
