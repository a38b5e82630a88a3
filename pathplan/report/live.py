"""The live page: serves a watched task to browsers on this machine, and to nobody else.

It listens on the loopback only. Requests must name the loopback as their host (so that no name that another site points
here is served), may not come from another site's page, and no answer may be kept or read by one.
"""

from __future__ import annotations

import contextlib
import errno
import json
import signal
import socket
import sys
import threading
from collections.abc import Callable, Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import parse_qs, urlsplit

from pathplan.errors import InputError
from pathplan.report.html import content_policy, document
from pathplan.report.watching import Watching

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["ADDRESSES", "PORT", "LivePage", "serve"]

PORT = 8571
ADDRESSES = ("127.0.0.1", "::1", "localhost")
HOLD = 20.0  # s that a request for news is held open
HEADERS = {
    "Cache-Control": "no-store",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Referrer-Policy": "no-referrer",
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
}


class LivePage:
    """A page about a watched task: `with LivePage(watching) as page: page.url`.

    Raises InputError for an address that is not the loopback, and for a port that is in use or can't be had. Port 0
    takes any that is free.
    """

    def __init__(self, watching: Watching, *, port: int = PORT, address: str = ADDRESSES[0]) -> None:
        if address not in ADDRESSES:
            expected = f"expected the loopback ({', '.join(ADDRESSES)})"
            raise InputError.at("address", f"{expected}, got {address}: the page is for this machine only")
        if not 0 <= port <= 65535:
            raise InputError.at("port", f"expected a number from 0 to 65535, got {port}")
        try:
            self.server = _Server(watching, port, address)
        except OSError as error:
            raise InputError.at("port", _why(error, port)) from None
        self.watching = watching
        bound = self.server.server_address[1]
        self.url = f"http://{f'[{address}]' if ':' in address else address}:{bound}/"
        self._thread = threading.Thread(target=self.server.serve_forever, args=(0.1,), name="page", daemon=True)

    def __enter__(self) -> LivePage:
        self._thread.start()
        return self

    def __exit__(self, *error: object) -> None:
        self.close()

    def close(self) -> None:
        """Answer those who wait, and listen no more."""
        self.server.ended.set()
        self.watching.wake()
        self.server.shutdown()
        self.server.server_close()
        self._thread.join()


def serve(
    file: Path,
    make: Callable[[], Plan],
    *,
    port: int = PORT,
    address: str = ADDRESSES[0],
    say: Callable[[str], None] = print,
) -> None:
    """Watch a task and serve its page until Ctrl-C or a request to end. `make` loads and plans, `say` tells in lines.

    Raises InputError as `LivePage` does.
    """
    watching = Watching(file, make, say)
    with LivePage(watching, port=port, address=address) as page, _ending() as ended:
        say(f"{page.url} shows {file} and follows it; Ctrl-C ends it")
        watching.run(ended)
    say("ended")


@contextlib.contextmanager
def _ending() -> Iterator[threading.Event]:
    """An event that Ctrl-C and SIGTERM set, where signals can be had."""
    ended = threading.Event()
    before: dict[int, Any] = {}

    def end(*_: object) -> None:
        # A handler runs within whatever the main thread does: in the middle of a wait, setting the event would wait
        # for a lock that the same thread holds.
        threading.Thread(target=ended.set).start()

    if threading.current_thread() is threading.main_thread():
        for number in (int(signal.SIGINT), int(signal.SIGTERM)):
            before[number] = signal.signal(number, end)
    try:
        yield ended
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _why(error: OSError, port: int) -> str:
    if error.errno == errno.EADDRINUSE:
        return f"{port} is in use: end what uses it or choose another with --port"
    if error.errno in (errno.EACCES, errno.EPERM):
        return f"{port} is not for you to use: choose another with --port, from 1024 on"
    return f"{port} can't be had: {error.strerror or error}"


class _Server(ThreadingHTTPServer):
    daemon_threads = True
    block_on_close = False
    allow_reuse_address = sys.platform != "win32"  # there it would let two servers share a port

    def __init__(self, watching: Watching, port: int, address: str) -> None:
        self.watching = watching
        self.ended = threading.Event()
        if address == "::1":
            self.address_family = socket.AF_INET6
        super().__init__((address, port), _Handler)
        hosts = ("127.0.0.1", "localhost", "[::1]")
        bound = self.server_address[1]
        self.hosts = {f"{host}:{bound}" for host in hosts} | (set(hosts) if bound == 80 else set())

    def server_bind(self) -> None:
        # without the look-up of the host's name that HTTPServer makes
        self.socket.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, int(self.allow_reuse_address))
        self.socket.bind(self.server_address)
        self.server_address = self.socket.getsockname()
        self.server_name, self.server_port = str(self.server_address[0]), int(self.server_address[1])

    def handle_error(self, request: Any, client_address: Any) -> None:
        if not isinstance(sys.exc_info()[1], OSError):  # a page that was closed is no news
            super().handle_error(request, client_address)


class _Handler(BaseHTTPRequestHandler):
    server: _Server
    protocol_version = "HTTP/1.1"
    server_version, sys_version = "pathplan", ""
    timeout = 60

    def do_GET(self) -> None:
        refusal = self._refusal()
        if refusal:
            self._answer(403, "text/plain; charset=utf-8", f"{refusal}\n")
            return
        place = urlsplit(self.path)
        if place.path == "/":
            self._page()
        elif place.path == "/state":
            self._news(parse_qs(place.query).get("seen", ["0"])[0])
        else:
            self._answer(404, "text/plain; charset=utf-8", "nothing here\n")

    do_HEAD = do_GET

    def _other(self) -> None:
        self.close_connection = True  # its body is not read
        self._answer(405, "text/plain; charset=utf-8", "only GET\n", Allow="GET, HEAD")

    do_POST = do_PUT = do_DELETE = do_PATCH = do_OPTIONS = _other

    def _refusal(self) -> str:
        """Why a request is not answered, '' if it is."""
        hosts = self.headers.get_all("Host") or []
        if len(hosts) != 1 or hosts[0].strip().lower() not in self.server.hosts:
            return "this page is for this machine only: use http://127.0.0.1 and its port"
        origin = self.headers.get("Origin")
        if origin is not None and urlsplit(origin).netloc.lower() != hosts[0].strip().lower():
            return "not for pages of another site"
        elsewhere = self.headers.get("Sec-Fetch-Site", "none") in ("cross-site", "same-site")
        # a link from elsewhere may open the page itself, and nothing may be drawn into another
        opens = self.path == "/" and self.headers.get("Sec-Fetch-Dest") == "document"
        return "not for pages of another site" if elsewhere and not opens else ""

    def _page(self) -> None:
        state = self.server.watching.state
        title = state.title or str(self.server.watching.file.name)
        text = document(title, state.parts, state.data, state.meta, live=state.version, trouble=state.trouble)
        self._answer(200, "text/html; charset=utf-8", text)

    def _news(self, seen: str) -> None:
        if self.server.ended.is_set():
            self.close_connection = True
            self._answer(503, "text/plain; charset=utf-8", "ended\n")
            return
        version = int(seen) if seen.isascii() and seen.isdigit() and len(seen) < 20 else 0
        state = self.server.watching.wait(version, HOLD)
        if self.server.ended.is_set():
            self.close_connection = True
            self._answer(503, "text/plain; charset=utf-8", "ended\n")
        elif state is None:
            self._answer(204, "", "")
        else:
            self._answer(200, "application/json", json.dumps(state.news(version), separators=(",", ":")))

    def _answer(self, status: int, kind: str, text: str, **more: str) -> None:
        body = text.encode()
        self.send_response(status)
        headers = {**HEADERS, "Content-Security-Policy": f"{content_policy(live=True)}; frame-ancestors 'none'", **more}
        if status != 204:
            headers |= {"Content-Type": kind, "Content-Length": str(len(body))}
        for name, value in headers.items():
            self.send_header(name, value)
        if self.close_connection:
            self.send_header("Connection", "close")
        self.end_headers()
        if self.command != "HEAD":
            self.wfile.write(body)

    def log_message(self, format: str, *args: Any) -> None:
        """Nothing: the terminal tells of plans."""
