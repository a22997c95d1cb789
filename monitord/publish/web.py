"""The HTTP server: /metrics, /healthz and a pointer to both, in a thread and an event loop of its own."""

import asyncio
import contextlib
import os
import socket
import threading
from collections.abc import Callable

import uvicorn
from starlette.applications import Starlette
from starlette.requests import Request
from starlette.responses import HTMLResponse, JSONResponse, Response
from starlette.routing import Route

from monitord.errors import MonitordError
from monitord.publish.metrics import CONTENT_TYPE_OPENMETRICS, CONTENT_TYPE_TEXT, MetricsPage

Health = Callable[[], tuple[str, list[str]]]

_OPENMETRICS = "application/openmetrics-text"
_START_WITHIN_S = 10.0
_IDLE_S = 75
_GRACE_S = 0.3
_POINTER = """<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><title>monitord</title></head>
<body><h1>monitord</h1>
<p><a href="metrics">metrics</a>: the measurements, for Prometheus.</p>
<p><a href="healthz">healthz</a>: whether the daemon does its job now.</p>
</body></html>
"""


def wants_openmetrics(accept: str) -> bool:
    """Tell whether an Accept header asks for OpenMetrics."""
    return any(offer.split(";")[0].strip().lower() == _OPENMETRICS for offer in accept.split(","))


def application(page: MetricsPage, health: Health) -> Starlette:
    """Build the application: three addresses, GET and HEAD."""

    # All three are coroutines, so that no pool of threads is needed.
    async def metrics(request: Request) -> Response:
        openmetrics = wants_openmetrics(request.headers.get("accept", ""))
        kind = CONTENT_TYPE_OPENMETRICS if openmetrics else CONTENT_TYPE_TEXT
        headers = {"content-type": kind, "vary": "accept", "cache-control": "no-store"}
        return Response(page.render(openmetrics), headers=headers)

    async def healthz(_: Request) -> Response:
        status, reasons = health()
        headers = {"cache-control": "no-store"}
        if status == "ok":
            return JSONResponse({"status": "ok"}, headers=headers)
        return JSONResponse({"status": status, "reasons": reasons}, 503, headers=headers)

    async def pointer(_: Request) -> Response:
        return HTMLResponse(_POINTER)

    return Starlette(routes=[Route("/metrics", metrics), Route("/healthz", healthz), Route("/", pointer)])


def listening_socket(listen: str) -> socket.socket:
    """Open the socket for `host:port` (`[host]:port` for IPv6; port 0: any free one).

    Raises MonitordError, in one line, where that cannot be.
    """
    host, _, port = listen.rpartition(":")
    host = host.removeprefix("[").removesuffix("]")
    if not host or not port.isdecimal() or int(port) > 65535:
        raise MonitordError(f'[http].listen = "{listen}": must be host:port, for instance 127.0.0.1:9560')
    try:
        family, kind, protocol, _, address = socket.getaddrinfo(host, int(port), type=socket.SOCK_STREAM)[0]
        opened = socket.socket(family, kind, protocol)
    except OSError as error:
        raise MonitordError(_cannot_listen(listen, error)) from None
    try:
        opened.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        opened.bind(address)
        opened.listen()
    except OSError as error:
        opened.close()
        raise MonitordError(_cannot_listen(listen, error)) from None
    return opened


def _cannot_listen(listen: str, error: OSError) -> str:
    # A resolver's errors have negative numbers and words of their own.
    number = error.errno or 0
    reason = os.strerror(number) if number > 0 else str(error.strerror or error)
    return f'[http].listen = "{listen}": {reason}; must be a free port of an address of this host'


class _Server(uvicorn.Server):
    """A server that says when it is ready, and does not wait for its clients when it ends."""

    def __init__(self, config: uvicorn.Config) -> None:
        super().__init__(config)
        self.ready = threading.Event()
        self._loop: asyncio.AbstractEventLoop | None = None
        self._ending = asyncio.Event()

    async def main_loop(self) -> None:
        """Sleep until asked to end; ten wakes a second, as they come, would cost more than a scrape does."""
        seconds = 0
        while not self.should_exit:
            await self.on_tick(10 * seconds)  # renews the Date header
            seconds += 1
            with contextlib.suppress(TimeoutError):
                await asyncio.wait_for(self._ending.wait(), 1.0)

    def end(self) -> None:
        """Ask the server to end. From any thread."""
        self.should_exit = True
        if self._loop is not None:
            self._loop.call_soon_threadsafe(self._ending.set)

    async def startup(self, sockets: list[socket.socket] | None = None) -> None:
        self._loop = asyncio.get_running_loop()
        await super().startup(sockets)
        self.ready.set()

    async def shutdown(self, sockets: list[socket.socket] | None = None) -> None:
        # A client that does not read its answer would hold the server for ever.
        asyncio.get_running_loop().call_later(_GRACE_S, self._cut)
        await super().shutdown(sockets)

    def _cut(self) -> None:
        for connection in list(self.server_state.connections):
            connection.transport.abort()


class WebServer:
    """Serves a metrics page and the daemon's health over HTTP."""

    def __init__(self, listen: str, page: MetricsPage, health: Health) -> None:
        """Make ready; nothing is opened before `start`.

        listen: `host:port`.
        health: gives "ok" and no reasons, or another status and the reasons; called in the server's thread.
        """
        self._listen = listen
        config = uvicorn.Config(
            application(page, health),
            http="h11",
            loop="asyncio",
            ws="none",
            lifespan="off",
            access_log=False,
            log_config=None,
            # Below that, it tells of its own doings and of every malformed request.
            log_level="error",
            server_header=False,
            proxy_headers=False,
            timeout_keep_alive=_IDLE_S,
            # Scrapers are few; without a limit, forgotten connections would use up the daemon's files.
            limit_concurrency=200,
        )
        self._server = _Server(config)
        self._socket: socket.socket | None = None
        self._thread: threading.Thread | None = None

    @property
    def port(self) -> int:
        """The port listened on. Raises MonitordError while not started."""
        if self._socket is None:
            raise MonitordError("the HTTP server has no port: it must be started first")
        return int(self._socket.getsockname()[1])

    def start(self) -> None:
        """Begin to serve; returns when requests are answered. Raises MonitordError where it cannot listen."""
        self._socket = listening_socket(self._listen)
        sockets = [self._socket]
        self._thread = threading.Thread(target=self._server.run, args=(sockets,), name="http", daemon=True)
        self._thread.start()
        if not self._server.ready.wait(_START_WITHIN_S):
            self.stop()
            raise MonitordError(f'[http].listen = "{self._listen}": not ready in {_START_WITHIN_S:g} s')

    def stop(self) -> None:
        """End within a second, whatever connections are still open. May be called twice."""
        if self._thread is None or self._socket is None:
            return
        if self._thread.is_alive():
            self._server.end()
        self._thread.join(1.0)
        self._socket.close()
        self._thread = None
