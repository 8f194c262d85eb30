"""A transport that hands a client's requests to an application in the same process, without a network."""

import asyncio
from collections.abc import Awaitable, Callable
from typing import Any

import httpx

Application = Callable[..., Awaitable[Any]]


class AppTransport(httpx.BaseTransport):
    """Synchronous on the outside; runs the application in an event loop of its own."""

    def __init__(self, app: Application) -> None:
        self._loop = asyncio.new_event_loop()
        self._inner = httpx.ASGITransport(app=app, raise_app_exceptions=False)

    def handle_request(self, request: httpx.Request) -> httpx.Response:
        request.read()

        async def exchange() -> httpx.Response:
            answer = await self._inner.handle_async_request(request)
            content = await answer.aread()
            return httpx.Response(answer.status_code, headers=answer.headers, content=content)

        return self._loop.run_until_complete(exchange())

    def close(self) -> None:
        self._loop.close()
