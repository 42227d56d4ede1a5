"""A small HTTP server for ``/metrics`` and ``/healthz``."""

from __future__ import annotations

import json
import socket
import sys
import threading
from collections.abc import Callable
from contextlib import suppress
from http.server import BaseHTTPRequestHandler, HTTPServer
from ipaddress import ip_address
from socketserver import TCPServer, ThreadingMixIn
from types import TracebackType
from typing import Any, Self

from prometheus_client import CollectorRegistry
from prometheus_client.exposition import CONTENT_TYPE_LATEST as PLAIN_TYPE
from prometheus_client.exposition import generate_latest as plain
from prometheus_client.openmetrics.exposition import CONTENT_TYPE_LATEST as OPEN_TYPE
from prometheus_client.openmetrics.exposition import generate_latest as openmetrics

from streambasis.errors import MetricsError
from streambasis.watch.health import Health
from streambasis.watch.values import Endpoint

MOST_CONNECTIONS = 16
"""Connections at a time; one more cuts the oldest: nobody can keep others out by waiting."""

PATIENCE = 5.0
"""Seconds that a connection may be silent."""

_POLL = 0.2


class _Handler(BaseHTTPRequestHandler):
    """Answers one request."""

    timeout = PATIENCE
    server: _Server
    server_version = "streambasis"
    sys_version = ""

    def do_GET(self) -> None:
        """Answer with a page."""
        self._answer(with_body=True)

    def do_HEAD(self) -> None:
        """Answer with the head of a page."""
        self._answer(with_body=False)

    def _answer(self, *, with_body: bool) -> None:
        code, kind, body = self._page(self.path.partition("?")[0])
        self.send_response(code)
        self.send_header("Content-Type", kind)
        self.send_header("Content-Length", str(len(body)))
        self.send_header("Cache-Control", "no-store")
        self.end_headers()
        if with_body:
            self.wfile.write(body)

    def _page(self, path: str) -> tuple[int, str, bytes]:
        if path == "/metrics":
            accepted = self.headers.get("Accept", "")
            if "text/plain" in accepted and "application/openmetrics-text" not in accepted:
                return 200, PLAIN_TYPE, plain(self.server.registry)
            body: bytes = openmetrics(self.server.registry)  # type: ignore[no-untyped-call]
            return 200, OPEN_TYPE, body
        if path == "/healthz":
            reasons = self.server.health.reasons()
            page = {"status": "unhealthy" if reasons else "ok", "reasons": reasons}
            body = (json.dumps(page, ensure_ascii=False) + "\n").encode("utf-8", "replace")
            return 503 if reasons else 200, "application/json", body
        return 404, "text/plain; charset=utf-8", b"there are /metrics and /healthz\n"

    def log_message(self, format: str, *arguments: Any) -> None:
        """Say nothing: that somebody looks is no news."""


class _Server(ThreadingMixIn, HTTPServer):
    """One thread per connection, of which there are few."""

    daemon_threads = False
    request_queue_size = 4 * MOST_CONNECTIONS

    def __init__(
        self,
        endpoint: Endpoint,
        registry: CollectorRegistry,
        health: Health,
        warned: Callable[[str], None],
    ) -> None:
        self.registry, self.health, self._warned = registry, health, warned
        self._lock = threading.Lock()
        self._connections: dict[Any, None] = {}
        found = socket.getaddrinfo(*endpoint, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE)
        self.address_family, address = found[0][0], found[0][4]
        super().__init__((str(address[0]), int(address[1])), _Handler)

    def server_bind(self) -> None:
        """Bind without asking a name server what this machine is called."""
        TCPServer.server_bind(self)
        self.server_name, self.server_port = str(self.server_address[0]), self.server_address[1]

    def process_request(self, request: Any, client_address: Any) -> None:
        """Start the thread of a connection; cut the oldest where there are too many."""
        with self._lock:
            self._connections[request] = None
            if len(self._connections) > MOST_CONNECTIONS:
                _cut(next(iter(self._connections)))
        super().process_request(request, client_address)

    def shutdown_request(self, request: Any) -> None:
        """Forget a connection that has been answered."""
        with self._lock:
            self._connections.pop(request, None)
        super().shutdown_request(request)

    def handle_error(self, request: Any, client_address: Any) -> None:
        """Warn of an error of ours; a connection that was cut or fell silent is none."""
        del request, client_address
        error = sys.exc_info()[1]
        if not isinstance(error, OSError):
            self._warned(f"metrics: {type(error).__name__}: {error}")

    def server_close(self) -> None:
        """Cut what is open and wait for its threads."""
        with self._lock:
            for request in self._connections:
                _cut(request)
        super().server_close()


def _cut(request: Any) -> None:
    # the other side may have closed it a moment ago
    with suppress(OSError):
        request.shutdown(socket.SHUT_RDWR)


class MetricsServer:
    """Serves metrics and health until closed.

    Parameters
    ----------
    endpoint : Endpoint
        Where; port 0 takes any that is free.
    registry : CollectorRegistry
        What ``/metrics`` shows.
    health : Health
        What ``/healthz`` shows.
    warned : callable
        Told of errors inside; they end no run.

    Attributes
    ----------
    url : str
        Where it is found.
    loopback : bool
        Whether only this machine can reach it.

    Raises
    ------
    MetricsError
        If the address cannot be used; the message names it.
    """

    def __init__(
        self,
        endpoint: Endpoint,
        registry: CollectorRegistry,
        health: Health,
        warned: Callable[[str], None],
    ) -> None:
        try:
            self._server = _Server(endpoint, registry, health, warned)
        except OSError as error:
            raise MetricsError(
                f"metrics {endpoint}: cannot be served there ({error.strerror or error}); "
                "choose another address"
            ) from None
        host, port = self._server.socket.getsockname()[:2]
        self.url = f"http://{Endpoint(host, port)}/metrics"
        self.loopback = ip_address(host.partition("%")[0]).is_loopback
        self._thread = threading.Thread(
            target=self._server.serve_forever, args=(_POLL,), name="metrics", daemon=True
        )
        self._thread.start()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Stop listening, and wait until every thread of it has ended."""
        self._server.shutdown()
        self._thread.join()
        self._server.server_close()
