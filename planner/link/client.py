"""The program's side of the rig link: one method for each call, and errors that say what to do next.

Nothing is retried here. Whether a request that got no clear answer may be sent again is a decision of the dispatcher,
which asks the rig first. `describe` and all other calls raise LinkError's children (planner/errors.py) and nothing of
the HTTP library's.
"""

import time
from collections.abc import Callable, Iterable
from datetime import datetime
from email.utils import parsedate_to_datetime
from types import TracebackType
from typing import Literal, Self, TypeVar

import httpx
from pydantic import BaseModel

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
from planner.link.messages import KEY, Description, Intent, Known, Now, Refusal, ShotReport, format_time
from planner.link.wire import LARGEST_ANSWER, MessageError, canonical, dump, read, shorten

ANSWER_WITHIN_S = 10.0  # without a wait, a rig answers in milliseconds; ten seconds is a hung one
CONNECT_WITHIN_S = 5.0
RETRY_DEFAULT_S = 1.0  # where a rig that says "not now" does not say when
RETRY_LONGEST_S = 3600.0

# raised before a byte of the request leaves; everything else may have reached the rig
_NOTHING_SENT = (
    httpx.ConnectError,
    httpx.ConnectTimeout,
    httpx.PoolTimeout,
    httpx.UnsupportedProtocol,
    httpx.ProxyError,
    httpx.InvalidURL,
)
_FOREIGN = (httpx.HTTPError, httpx.InvalidURL, httpx.StreamError, httpx.CookieConflict)

Answer = TypeVar("Answer", bound=BaseModel)
Taken = Literal["accepted", "known"]


def translate(error: Exception, address: str) -> LinkError:
    """The LinkError that stands for an exception of the HTTP library, most specific class first."""
    detail = str(error) or type(error).__name__
    if isinstance(error, _NOTHING_SENT):
        return RigUnreachable(
            f"no rig answers at {address} ({detail}); nothing was sent. Is its program running, and the address right?"
        )
    if isinstance(error, (httpx.DecodingError, httpx.TooManyRedirects)):
        return RigMalformed(f"the rig at {address} answered in a way that cannot be read ({detail})", answer=detail)
    if isinstance(error, httpx.TimeoutException):
        return RigUnknown(f"the rig at {address} did not answer in time; ask it what became of the request")
    return RigUnknown(f"the connection to the rig at {address} broke ({detail}); ask it what became of the request")


class RigClient:
    """A rig at `base_url`. Keeps its connection open between calls; close it, or use it in a `with` block.

    `token` is sent as bearer token (RFC 6750). `transport` replaces the network in tests. A call gives up
    `answer_within_s` after the longest time that the rig was allowed to wait.
    """

    def __init__(
        self,
        base_url: str,
        token: str | None = None,
        transport: httpx.BaseTransport | None = None,
        *,
        answer_within_s: float = ANSWER_WITHIN_S,
        connect_within_s: float = CONNECT_WITHIN_S,
    ) -> None:
        self.address = _checked_address(base_url)
        self._answer_within_s = answer_within_s
        self._connect_within_s = connect_within_s
        headers = {"accept": "application/json", "accept-encoding": "identity"}
        if token is not None:
            if not (token.isascii() and token.isprintable() and token.strip() == token and token):
                raise InputError("the rig's token holds characters that a bearer token cannot have")
            headers["authorization"] = f"Bearer {token}"
        # proxies and .netrc of the environment have no business between a program and its rig
        self._http = httpx.Client(base_url=self.address, headers=headers, transport=transport, trust_env=False)

    def close(self) -> None:
        """Close the connection."""
        self._http.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def describe(self) -> Description:
        """What the rig is and can do."""
        return self._get(Description, "/link")

    def now(self) -> Now:
        """The rig's time and whether it is ready."""
        return self._get(Now, "/link/now")

    def put(self, key: str, intent: Intent) -> Taken:
        """Send one attempt. "accepted": the rig has it now; "known": it had the same one already.

        RigNotNow, RigRefused (`status` 409, 410, 412, 422, ...), RigFenced and RigUnreachable mean that this call
        accepted nothing. RigUnknown and RigMalformed mean that it may have: ask.
        """
        status, raw = self._call("PUT", f"/link/shots/{_checked_key(key)}", body=dump(intent.document()))
        if status == 201:
            return "accepted"
        if status == 200:
            return "known"
        raise self._malformed(f"answered a new shot with status {status}", raw)

    def ask(self, key: str, wait_s: float = 0.0) -> ShotReport:
        """What the rig knows of `key`; it may wait up to `wait_s` real seconds for the shot's end, or answer early."""
        path = f"/link/shots/{_checked_key(key)}"
        if wait_s > 0:
            path += f"?wait={wait_s:g}"
        report = self._get(ShotReport, path, wait_s=wait_s)
        if report.key != key:
            raise self._malformed(f"was asked for {key} and answered for {report.key}", canonical(report.document()))
        return report

    def since(self, ordinal: int) -> Known:
        """All shots with a later ordinal that the rig still knows, waiting ones included, by rising ordinal.

        One bad record spoils the whole answer (RigMalformed); ask key by key then.
        """
        known = self._get(Known, f"/link/shots?after={ordinal}")
        if any(shot.ordinal is None or shot.ordinal <= ordinal for shot in known.shots):
            raise self._malformed(f"was asked for shots after {ordinal}", canonical(known.document()))
        return known.model_copy(update={"shots": sorted(known.shots, key=lambda shot: shot.ordinal or 0)})

    def withdraw(self, key: str) -> None:
        """Take a waiting shot back, or leave word that `key` must not be accepted if it still comes.

        RigRefused with status 409: it runs or has ended.
        """
        self._succeed("DELETE", f"/link/shots/{_checked_key(key)}")

    def ack(self, keys: Iterable[str]) -> None:
        """Tell the rig that these results are stored here and may be forgotten there."""
        self._succeed("POST", "/link/ack", body=dump({"keys": [_checked_key(key) for key in keys]}))

    def move_clock(self, until: datetime) -> Now:
        """Move a simulated clock to the earlier of `until` and the rig's next event; the rig's time after it."""
        status, raw = self._call("POST", "/link/clock", body=dump({"until": format_time(until)}))
        return self._read(Now, status, raw)

    def _get(self, model: type[Answer], path: str, *, wait_s: float = 0.0) -> Answer:
        status, raw = self._call("GET", path, wait_s=wait_s)
        return self._read(model, status, raw)

    def _read(self, model: type[Answer], status: int, raw: bytes) -> Answer:
        if status != 200:
            raise self._malformed(f"answered with status {status}", raw)
        try:
            return read(model, raw)
        except MessageError as bad:
            raise self._malformed(str(bad), raw) from bad

    def _succeed(self, method: str, path: str, body: bytes | None = None) -> None:
        status, raw = self._call(method, path, body=body)
        if status not in (200, 204):
            raise self._malformed(f"answered with status {status}", raw)

    def _call(self, method: str, path: str, *, body: bytes | None = None, wait_s: float = 0.0) -> tuple[int, bytes]:
        """Status (1xx to 3xx) and body of one exchange; everything else is raised, foreign errors translated."""
        within_s = wait_s + self._answer_within_s
        deadline = time.monotonic() + within_s
        headers = {} if body is None else {"content-type": "application/json"}
        timeout = httpx.Timeout(within_s, connect=self._connect_within_s)
        try:
            with self._http.stream(method, path, content=body, headers=headers, timeout=timeout) as answer:
                raw = self._body(answer, deadline)
        except _FOREIGN as error:
            raise translate(error, self.address) from error
        if answer.status_code >= 400:
            raise self._refusal(answer, raw)
        return answer.status_code, raw

    def _body(self, answer: httpx.Response, deadline: float) -> bytes:
        """The body, bounded in size and in time: a timeout of the HTTP library counts single reads only."""
        parts = []
        size = 0
        for part in answer.iter_bytes():
            parts.append(part)
            size += len(part)
            if size > LARGEST_ANSWER:
                raise self._malformed(f"answered with more than {LARGEST_ANSWER} bytes", b"".join(parts)[:1000])
            if time.monotonic() > deadline:
                raise RigUnknown(f"the rig at {self.address} was still answering when its time was up; ask it again")
        return b"".join(parts)

    def _refusal(self, answer: httpx.Response, raw: bytes) -> LinkError:
        status = answer.status_code
        try:
            why = read(Refusal, raw).why
        except MessageError:
            why = shorten(raw.decode("utf-8", "replace")) or answer.reason_phrase
        said = f"the rig at {self.address} answered {status}: {why}"
        if status in (429, 503):
            return RigNotNow(said, retry_after_s=_retry_after(answer), full=status == 429)
        if status == 403:
            return RigFenced(said)
        if status == 408 or status >= 500:  # 408: the rig gave up reading; whether it had enough, only it knows
            return RigUnknown(f"{said}; ask it what became of the request")
        return RigRefused(said, status=status, why=why)

    def _malformed(self, what: str, raw: bytes) -> RigMalformed:
        return RigMalformed(
            f"the rig at {self.address} {what}: its side of the link breaks the rules",
            answer=shorten(raw.decode("utf-8", "replace")),
        )


def _checked_address(text: str) -> str:
    try:
        url = httpx.URL(text)
    except httpx.InvalidURL as error:
        raise InputError(f"{text!r} is no rig address ({error}); expected one such as http://127.0.0.1:8700") from error
    if url.scheme not in ("http", "https") or not url.host or url.query or url.fragment or url.userinfo:
        raise InputError(f"{text!r} is no rig address; expected one such as http://127.0.0.1:8700")
    return str(url).rstrip("/")


def _checked_key(key: str) -> str:
    if not KEY.fullmatch(key):
        raise InputError(f"{key!r} cannot be a shot's key: 8 to 64 letters, digits, - or _")
    return key


def _retry_after(answer: httpx.Response) -> float:
    """Seconds to wait (RFC 9110, 10.2.3: a number of seconds or a date), between 0 and an hour."""
    text = answer.headers.get("retry-after", "")
    attempts: tuple[Callable[[], float], ...] = (
        lambda: float(text),
        lambda: (parsedate_to_datetime(text) - parsedate_to_datetime(answer.headers["date"])).total_seconds(),
    )
    for attempt in attempts:
        try:
            seconds = attempt()
        except (ValueError, TypeError, KeyError):
            continue
        if seconds >= 0:  # also refuses not-a-number
            return min(seconds, RETRY_LONGEST_S)
    return RETRY_DEFAULT_S
