"""A forwarder on loopback that sees every HTTP request, counts it, and can spoil the answer.

It stands between the code under test and a real server, so that "one GET per row group" and "a lost answer" are
seen from outside, independently of our own counting. It passes the Host header on, so signatures stay valid.
"""

from __future__ import annotations

import http.client
import socket
import threading
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from types import TracebackType
from typing import Any
from urllib.parse import unquote, urlsplit

LOOPBACK = "127.0.0.1"
PIECE_BYTES = 2**18
_HOP = {"connection", "transfer-encoding", "keep-alive"}


@dataclass
class Fault:
    """How to spoil the next answers to a kind of request.

    ``kind``: ``"status"`` answers with ``status`` and forwards nothing; ``"lost"`` lets the server do it and hangs
    up without an answer; ``"cut"`` hangs up in the middle of the body; ``"short"`` halves the body and its length
    consistently; ``"etag"`` changes the ETag.
    """

    method: str
    path: str
    kind: str
    times: int = 1
    status: int = 503
    code: str = "SlowDown"

    def matches(self, method: str, path: str) -> bool:
        """Whether this fault is for a request and not used up."""
        return self.times > 0 and method == self.method and self.path in path


class SniffingProxy:
    """A running forwarder to one upstream; use as a context.

    Attributes
    ----------
    endpoint : str
        Address to give to the code under test.
    before : callable, optional
        Called with (method, path) before a request is forwarded.
    """

    def __init__(self, upstream: str) -> None:
        self._upstream = urlsplit(upstream).netloc
        self._lock = threading.Lock()
        self._counts: Counter[tuple[str, str]] = Counter()
        self._faults: list[Fault] = []
        self.before: Callable[[str, str], object] | None = None
        self._server = _Server((LOOPBACK, 0), _handler_of(self))
        self.endpoint = f"http://{LOOPBACK}:{self._server.server_address[1]}"
        self._thread = threading.Thread(target=self._server.serve_forever, args=(0.01,), daemon=True)
        self._thread.start()

    def fail(self, method: str, path: str, kind: str, times: int = 1, **details: Any) -> Fault:
        """Spoil the next ``times`` answers to requests of a method whose path holds a text."""
        fault = Fault(method, path, kind, times, **details)
        with self._lock:
            self._faults.append(fault)
        return fault

    def count(self, method: str, path: str = "") -> int:
        """Return how many requests of a method came in whose path holds a text."""
        with self._lock:
            return sum(n for (verb, place), n in self._counts.items() if verb == method and path in place)

    def counts(self) -> dict[tuple[str, str], int]:
        """Return all requests by method and path (without the query)."""
        with self._lock:
            return dict(self._counts)

    def forget(self) -> None:
        """Begin counting anew, and drop the faults that are left."""
        with self._lock:
            self._counts.clear()
            self._faults.clear()

    def __enter__(self) -> SniffingProxy:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._server.shutdown()
        self._server.server_close()
        self._thread.join()

    def saw(self, method: str, path: str) -> Fault | None:
        """Count a request and return the fault for it, used once."""
        with self._lock:
            self._counts[method, path] += 1
            fault = next((f for f in self._faults if f.matches(method, path)), None)
            if fault is not None:
                fault.times -= 1
        if self.before is not None:
            self.before(method, path)
        return fault

    def ask(self, method: str, path: str, headers: list[tuple[str, str]], body: bytes) -> http.client.HTTPResponse:
        """Forward one request over a new connection, which the answer closes with itself."""
        connection = http.client.HTTPConnection(self._upstream, timeout=60)
        connection.putrequest(method, path, skip_host=True, skip_accept_encoding=True)
        for name, value in headers:
            connection.putheader(name, value)
        connection.endheaders(body or None)
        return connection.getresponse()


class _Server(ThreadingHTTPServer):
    daemon_threads = True
    request_queue_size = 128

    def handle_error(self, request: Any, client_address: Any) -> None:
        """Say nothing of clients that hang up."""


def _handler_of(proxy: SniffingProxy) -> type[BaseHTTPRequestHandler]:
    class Handler(BaseHTTPRequestHandler):
        protocol_version = "HTTP/1.1"
        disable_nagle_algorithm = True

        def handle_one(self) -> None:
            body = self.rfile.read(int(self.headers.get("Content-Length", 0)))
            path = unquote(urlsplit(self.path).path)
            fault = proxy.saw(self.command, path)
            if fault is not None and fault.kind == "status":
                self._answer_status(fault)
                return
            headers = [(k, v) for k, v in self.headers.items() if k.lower() not in {*_HOP, "expect"}]
            answer = proxy.ask(self.command, self.path, headers, body)
            if fault is not None and fault.kind == "lost":
                answer.read()
                self._hang_up()
                return
            self._relay(answer, fault)

        do_GET = do_PUT = do_HEAD = do_POST = do_DELETE = handle_one

        def _answer_status(self, fault: Fault) -> None:
            error = f"<Error><Code>{fault.code}</Code><Message>injected</Message></Error>"
            body = b"" if fault.status < 300 else error.encode()
            self.send_response_only(fault.status)
            self.send_header("Content-Length", str(len(body)))
            self.end_headers()
            if self.command != "HEAD":
                self.wfile.write(body)

        def _relay(self, answer: http.client.HTTPResponse, fault: Fault | None) -> None:
            length = 0 if self.command == "HEAD" else int(answer.getheader("Content-Length") or 0)
            chunked = answer.getheader("Transfer-Encoding") == "chunked"
            body = answer.read() if chunked or fault is not None else None
            length = len(body) if body is not None else length
            kind = fault.kind if fault is not None else ""
            told = length // 2 if kind == "short" else length
            self.send_response_only(answer.status, answer.reason)
            for name, value in answer.getheaders():
                if name.lower() in _HOP or (name.lower() == "content-length" and self.command != "HEAD"):
                    continue
                changed = name.lower() == "etag" and kind == "etag"
                self.send_header(name, '"0123456789abcdef"' if changed else value)
            if self.command != "HEAD" and answer.status not in (204, 304):
                self.send_header("Content-Length", str(told))
            self.end_headers()
            self._send(answer, body, length // 2 if kind in ("short", "cut") else length)
            if kind == "cut":
                self._hang_up()

        def _send(self, answer: http.client.HTTPResponse, body: bytes | None, length: int) -> None:
            if body is not None:
                self.wfile.write(body[:length])
                return
            while piece := answer.read(min(PIECE_BYTES, length)):
                self.wfile.write(piece)

        def _hang_up(self) -> None:
            self.close_connection = True
            self.wfile.flush()
            self.connection.shutdown(socket.SHUT_RDWR)

        def log_message(self, format: str, *args: Any) -> None:
            """Keep quiet."""

    return Handler
