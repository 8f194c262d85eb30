"""HTTP for a host: the calls of the rig link as a Starlette application, and nothing more.

It bounds and reads what comes in, checks the bearer token (RFC 6750), calls the host, and says its answer or its
refusal. Long waits are asynchronous, so that a waiting program does not stop another one from asking.
"""

import asyncio
import contextlib
import hmac
import math
from collections.abc import AsyncIterator, Awaitable, Callable
from typing import TypeVar

from pydantic import BaseModel
from starlette.applications import Starlette
from starlette.exceptions import HTTPException
from starlette.requests import Request
from starlette.responses import Response
from starlette.routing import Route

from planner.errors import RigFenced, RigNotNow, RigRefused
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.messages import KEY, Acknowledgement, ClockMove, Intent
from planner.link.wire import LARGEST_REQUEST, MessageError, dump, read

LONGEST_WAIT_S = 600.0
LARGEST_ORDINAL = 2**63 - 1

Body = TypeVar("Body", bound=BaseModel)
Handler = Callable[[Request], Awaitable[Response]]


def rig_app(host: Host, *, token: str | None = None) -> Starlette:
    """The application that puts `host` on the link; with a `token`, only who shows it is heard.

    The application closes the host when it shuts down. On a real clock a Player (player.py) must run beside it.
    """
    calls = _Calls(host, token)

    @contextlib.asynccontextmanager
    async def life(_: Starlette) -> AsyncIterator[None]:
        try:
            yield
        finally:
            host.close()

    return Starlette(
        routes=[
            Route("/link", calls.guarded(calls.describe), methods=["GET"]),
            Route("/link/now", calls.guarded(calls.now), methods=["GET"]),
            Route("/link/shots", calls.guarded(calls.since), methods=["GET"]),
            Route("/link/shots/{key}", calls.guarded(calls.put), methods=["PUT"]),
            Route("/link/shots/{key}", calls.guarded(calls.ask), methods=["GET"]),
            Route("/link/shots/{key}", calls.guarded(calls.withdraw), methods=["DELETE"]),
            Route("/link/ack", calls.guarded(calls.ack), methods=["POST"]),
            Route("/link/clock", calls.guarded(calls.move_clock), methods=["POST"]),
        ],
        exception_handlers={HTTPException: _say_refusal, Exception: _say_internal},
        lifespan=life,
    )


class _Calls:
    """The calls, each a thin coat round the host's method."""

    def __init__(self, host: Host, token: str | None) -> None:
        self._host = host
        self._token = None if token is None else f"Bearer {token}".encode()

    def guarded(self, call: Handler) -> Handler:
        """`call`, behind the token, with the host's refusals said as statuses."""

        async def guard(request: Request) -> Response:
            shown = request.headers.get("authorization", "").encode("latin-1")
            if self._token is not None and not hmac.compare_digest(shown, self._token):
                raise HTTPException(401, "this rig asks for a bearer token", {"www-authenticate": "Bearer"})
            try:
                return await call(request)
            except RigFenced as fenced:
                raise HTTPException(403, str(fenced)) from fenced
            except RigRefused as refused:
                raise HTTPException(refused.status, refused.why) from refused
            except RigNotNow as busy:
                status = 429 if busy.full else 503
                raise HTTPException(status, str(busy), {"retry-after": str(math.ceil(busy.retry_after_s))}) from busy

        return guard

    async def describe(self, _: Request) -> Response:
        return _say(self._host.describe())

    async def now(self, _: Request) -> Response:
        return _say(self._host.now())

    async def since(self, request: Request) -> Response:
        return _say(self._host.since(int(_number(request, "after", 0, LARGEST_ORDINAL))))

    async def put(self, request: Request) -> Response:
        key = _key(request)
        intent = await _body(request, Intent)
        taken = self._host.put(key, intent)
        return _say(self._host.ask(key), status=201 if taken == "accepted" else 200)

    async def ask(self, request: Request) -> Response:
        key = _key(request)
        wait_s = _number(request, "wait", 0.0, LONGEST_WAIT_S)
        if isinstance(self._host.clock, SimulatedClock):
            return _say(self._host.ask(key, wait_s))
        await self._wait_for_end(key, wait_s)
        return _say(self._host.ask(key))

    async def withdraw(self, request: Request) -> Response:
        key = _key(request)
        self._host.withdraw(key)
        return _say(self._host.ask(key))

    async def ack(self, request: Request) -> Response:
        message = await _body(request, Acknowledgement)
        self._host.ack(message.keys)
        return Response(b"{}", media_type="application/json")

    async def move_clock(self, request: Request) -> Response:
        message = await _body(request, ClockMove)
        return _say(self._host.move_clock(message.until))

    async def _wait_for_end(self, key: str, wait_s: float) -> None:
        """Return when the shot has ended, is unknown, the host closes, or `wait_s` is over."""
        loop, something_ended = asyncio.get_running_loop(), asyncio.Event()
        stop = self._host.listen(lambda: _call_in(loop, something_ended.set))
        try:
            async with asyncio.timeout(wait_s):
                while self._host.is_pending(key):
                    await something_ended.wait()
                    something_ended.clear()
        except TimeoutError:
            return
        finally:
            stop()


def _call_in(loop: asyncio.AbstractEventLoop, action: Callable[[], None]) -> None:
    with contextlib.suppress(RuntimeError):  # the loop has closed: nobody waits any more
        loop.call_soon_threadsafe(action)


def _say(message: BaseModel, status: int = 200) -> Response:
    return Response(message.model_dump_json().encode(), status, media_type="application/json")


async def _say_refusal(_: Request, error: Exception) -> Response:
    if not isinstance(error, HTTPException):
        raise error
    body = dump({"why": error.detail})
    return Response(body, error.status_code, headers=dict(error.headers or {}), media_type="application/json")


async def _say_internal(_: Request, error: Exception) -> Response:
    return Response(
        dump({"why": f"the rig's program failed ({type(error).__name__})"}), 500, media_type="application/json"
    )


def _key(request: Request) -> str:
    key: str = request.path_params["key"]
    if not KEY.fullmatch(key):
        raise HTTPException(422, "a key has 8 to 64 letters, digits, - or _")
    return key


def _number(request: Request, name: str, default: float, largest: float) -> float:
    text = request.query_params.get(name)
    if text is None:
        return default
    try:
        value = type(default)(text)
    except ValueError:
        value = -1
    if not 0 <= value <= largest:
        raise HTTPException(422, f"{name}={text[:40]}: expected a number from 0 to {largest:g}")
    return value


async def _body(request: Request, model: type[Body]) -> Body:
    if request.headers.get("content-type", "").split(";")[0].strip().lower() != "application/json":
        raise HTTPException(415, "send application/json")  # which also keeps other pages of a browser out
    raw = bytearray()
    async for part in request.stream():
        raw += part
        if len(raw) > LARGEST_REQUEST:
            raise HTTPException(413, f"more than {LARGEST_REQUEST} bytes")
    try:
        return read(model, bytes(raw))
    except MessageError as error:
        raise HTTPException(422, str(error)) from error
