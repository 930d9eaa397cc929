"""Requests for /metrics, /healthz and /readyz come in; pages of text go out, from threads of their own."""

from __future__ import annotations

import errno
import socket
import threading
from collections.abc import Callable
from http.server import BaseHTTPRequestHandler
from socketserver import ThreadingTCPServer
from typing import Any

from stream.errors import BadSettings, BedloadError, CannotCreate, NoPermission

__all__ = ["Port"]

SILENT_S = 10.0


class Port:
    """Answers at `address`:`port` (0: any free one; see `number`) until it is closed.

    `metrics` is given the header Accept and gives a page and its content type; `trouble_of` has a function
    for each path of a check: None is 200, a reason is 503. Raises CannotCreate where the port is taken,
    NoPermission where it may not be used, BadSettings where the address is none of this machine.
    """

    def __init__(
        self,
        address: str,
        port: int,
        metrics: Callable[[str], tuple[bytes, str]],
        trouble_of: dict[str, Callable[[], str | None]],
    ) -> None:
        class Handler(_Handler):
            pages = (metrics, trouble_of)

        kind = _Server6 if ":" in address else _Server
        try:
            self._server = kind((address, port), Handler)
        except OSError as error:
            raise _refused(error, address, port) from error
        self.number: int = self._server.server_address[1]
        self._thread = threading.Thread(
            target=self._server.serve_forever, args=(0.1,), name="metrics port", daemon=True
        )
        self._thread.start()

    def close(self) -> None:
        """Closes the port; requests under way are not waited for."""
        self._server.shutdown()
        self._server.server_close()
        self._thread.join()


class _Server(ThreadingTCPServer):
    allow_reuse_address = True
    daemon_threads = True
    block_on_close = False

    def handle_error(self, request: Any, client_address: Any) -> None:
        """Who asks and goes away before the answer is no concern of the log."""


class _Server6(_Server):
    address_family = socket.AF_INET6


class _Handler(BaseHTTPRequestHandler):
    pages: tuple[Callable[[str], tuple[bytes, str]], dict[str, Callable[[], str | None]]]
    timeout = SILENT_S
    server_version = "bedload"
    sys_version = ""

    def do_GET(self) -> None:
        """One page."""
        metrics, checks = self.pages
        path = self.path.partition("?")[0]
        if path == "/metrics":
            body, content_type = metrics(self.headers.get("Accept", ""))
            self._answer(200, body, content_type)
        elif path in checks:
            trouble = checks[path]()
            self._answer(200 if trouble is None else 503, f"{trouble or 'ok'}\n".encode())
        else:
            self._answer(404, f"there are /metrics, {' and '.join(checks)}\n".encode())

    do_HEAD = do_GET

    def log_message(self, format: str, *args: Any) -> None:
        """Requests are not logged."""

    def _answer(self, status: int, body: bytes, content_type: str = "text/plain; charset=utf-8") -> None:
        self.send_response(status)
        self.send_header("Content-Type", content_type)
        self.send_header("Content-Length", str(len(body)))
        self.send_header("Cache-Control", "no-store")
        self.end_headers()
        if self.command != "HEAD":
            self.wfile.write(body)


def _refused(error: OSError, address: str, port: int) -> BedloadError:
    place = f"{address}:{port} (worker.metrics_address, worker.metrics_port)"
    if isinstance(error, PermissionError):
        return NoPermission(f"cannot listen at {place}: {error.strerror}; take a port from 1024 on")
    if isinstance(error, socket.gaierror) or error.errno == errno.EADDRNOTAVAIL:
        return BadSettings(f"cannot listen at {place}: this machine has no such address; name one of its own")
    return CannotCreate(
        f"cannot listen at {place}: {error.strerror}; is another worker running? Give each its own port"
    )
