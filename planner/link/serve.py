"""Run a host as a program of its own: socket, uvicorn, signals, the player's thread.

Answers on the loopback address alone unless there is a token: whoever can reach the link can start shots.
"""

import asyncio
import ipaddress
import os
import signal
import socket
import sys
import threading
from collections.abc import Callable

import uvicorn

from planner.errors import InputError
from planner.link.adapter import Adapter
from planner.link.clocks import RealClock
from planner.link.host import Host
from planner.link.player import Player
from planner.link.server import rig_app

KEEP_ALIVE_S = 3600  # longer than the client keeps a connection, so that the server never closes one as it is used
LAST_SHOT_S = 5.0  # how long a shot under way may still take when the program is asked to end
GRACE_S = 2


def serve(
    host: Host,
    adapter: Adapter,
    *,
    announce: Callable[[str], None],
    bind: str = "127.0.0.1",
    port: int = 0,
    token: str | None = None,
    until_stdin_closes: bool = False,
) -> None:
    """Serve until SIGINT or SIGTERM (or the end of standard input); `announce` gets the address once it answers.

    Port 0 takes a free one. Raises InputError where the address cannot be used.
    """
    check_bind(bind, token)
    with listen(bind, port) as listener:
        name, actual = listener.getsockname()[:2]
        address = f"http://[{name}]:{actual}" if ":" in name else f"http://{name}:{actual}"
        config = uvicorn.Config(
            rig_app(host, token=token),
            http="h11",
            loop="asyncio",
            ws="none",
            lifespan="on",
            log_level="warning",
            access_log=False,
            server_header=False,
            timeout_keep_alive=KEEP_ALIVE_S,
            timeout_graceful_shutdown=GRACE_S,
        )
        server = _Server(config, host, adapter, lambda: announce(address))
        if until_stdin_closes:
            threading.Thread(target=server.end_with_stdin, name="stdin", daemon=True).start()
        # uvicorn ends in good order on these and then raises them again; by then there is nothing left to do
        for number in (signal.SIGINT, signal.SIGTERM):
            signal.signal(number, lambda *_: None)
        server.run(sockets=[listener])


def listen(bind: str, port: int) -> socket.socket:
    """A listening TCP socket; raises InputError where the address cannot be used.

    The protocol is named because asyncio sends small answers at once (TCP_NODELAY) only on sockets that say TCP, as
    those of `socket.create_server` do not; without it every answer waits 40 ms for an acknowledgement.
    """
    listener = socket.socket(socket.AF_INET6 if ":" in bind else socket.AF_INET, socket.SOCK_STREAM, socket.IPPROTO_TCP)
    try:
        if os.name == "posix":  # elsewhere the same option would let two programs share the port
            listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind((bind, port))
        listener.listen()
    except (OSError, OverflowError) as error:
        listener.close()
        raise InputError(f"cannot listen at {bind} port {port}: {error}") from error
    return listener


def check_bind(bind: str, token: str | None) -> None:
    """Raise InputError for an address that others can reach when there is no token."""
    try:
        inside = bind == "localhost" or ipaddress.ip_address(bind).is_loopback
    except ValueError as error:
        raise InputError(f"{bind!r} is no address to listen at; expected one such as 127.0.0.1") from error
    if not inside and token is None:
        raise InputError(
            f"{bind} can be reached from other computers, and who reaches a rig can start shots: "
            "give a token with --token-file, or listen at 127.0.0.1"
        )


class _Server(uvicorn.Server):
    """uvicorn, with the player started before the first answer and stopped before the last."""

    def __init__(self, config: uvicorn.Config, host: Host, adapter: Adapter, announce: Callable[[], None]) -> None:
        super().__init__(config)
        self._host = host
        self._adapter = adapter
        self._announce = announce
        self._player = Player(host, adapter) if isinstance(host.clock, RealClock) else None

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        await super().startup(sockets)
        if self._player is not None:
            self._player.start()
        self._announce()

    async def shutdown(self, sockets: list[socket.socket] | None = None) -> None:
        if self._player is not None:
            await asyncio.to_thread(self._player.stop, LAST_SHOT_S)
        self._adapter.close()
        if self._player is not None:
            await asyncio.to_thread(self._player.stop, LAST_SHOT_S)
        self._host.close()
        await super().shutdown(sockets)

    def end_with_stdin(self) -> None:
        """Ask the server to end when standard input does: a rig whose parent has died goes too."""
        while sys.stdin.buffer.read(4096):
            pass
        self.should_exit = True
