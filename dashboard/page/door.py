"""Who is let in: the decisions about requests, and the server that asks for them.

The page shows and changes nothing, but what it shows is the laboratory's own. Only the loopback
address is listened to. A request must name this server as its host (so that no other site can
reach it under a name of its own), a websocket must come from a page of this server, and there is
a limit to the pages open at once. Sessions are signed with a secret that is made at each start.
"""

from __future__ import annotations

import asyncio
import secrets
import socket
from collections.abc import Callable
from typing import Any

from bokeh.application import Application
from bokeh.application.handlers.function import FunctionHandler
from bokeh.document import Document
from bokeh.server.server import BaseServer
from bokeh.server.tornado import BokehTornado
from bokeh.server.views.doc_handler import DocHandler
from bokeh.settings import settings
from tornado.httpserver import HTTPServer
from tornado.httputil import HTTPMessageDelegate, HTTPServerRequest
from tornado.ioloop import IOLoop
from tornado.web import RequestHandler

from dashboard.ports import LOOPBACK

MOST_PAGES = 24
LARGEST_MESSAGE = 1 << 20
UNUSED_S = 10
CLOSE_S = 0.3
TOKEN_LASTS_S = 24 * 3600
"""How long an opened page may come back after its connection broke: a night, a sleeping laptop."""

HEADERS = {
    "Content-Security-Policy": (
        "default-src 'none'; script-src 'self' 'unsafe-inline' 'unsafe-eval'; "
        "style-src 'self' 'unsafe-inline'; img-src 'self' data: blob:; font-src 'self' data:; "
        "connect-src 'self' ws://{host}; base-uri 'none'; form-action 'none'; "
        "frame-ancestors 'none'"
    ),
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cache-Control": "no-store",
}


class Door:
    """Decides about one request. ``port`` is the server's own."""

    def __init__(self, port: int, most_pages: int = MOST_PAGES) -> None:
        self.port, self.most_pages = port, most_pages
        self.hosts = frozenset(f"{name}:{port}" for name in (LOOPBACK, "localhost"))

    def refusal(
        self, path: str, host: str, origin: str | None, open_sessions: int
    ) -> tuple[int, str] | None:
        """Status and sentence for a request that is refused; None for one that is let in."""
        if host.lower() not in self.hosts:
            return 403, f"This page is served as {' or '.join(sorted(self.hosts))} only."
        if path == "/ws":
            if origin not in {f"http://{name}" for name in self.hosts}:
                return 403, "Only the page itself may connect here."
            return None
        if path == "/":
            if open_sessions >= self.most_pages:
                return 503, f"{self.most_pages} pages are open already: close some, then reload."
            return None
        if path.startswith("/static/") or path == "/favicon.ico":
            return None
        return 404, "There is nothing here; the page is at /."


class PageHandler(DocHandler):
    """Serves the page itself, with headers that keep the browser from any other host."""

    def set_default_headers(self) -> None:
        """Say what the page may load: its own server's files."""
        for name, value in HEADERS.items():
            self.set_header(name, value.format(host=self.request.host))


class RefusedHandler(RequestHandler):
    """Says why a request is refused."""

    def initialize(self, status: int, text: str) -> None:
        """Called with what :meth:`Door.refusal` said."""
        self._refusal = status, text

    def prepare(self) -> None:
        """Answer, whatever the method is."""
        self.set_status(self._refusal[0])
        self.set_header("Content-Type", "text/plain; charset=utf-8")
        self.finish(self._refusal[1] + "\n")


class GuardedTornado(BokehTornado):
    """Bokeh's application with a :class:`Door` in front of all its handlers."""

    def __init__(self, door: Door, application: Application, **options: Any) -> None:
        self._door = door
        super().__init__({"/": application}, **options)

    def find_handler(self, request: HTTPServerRequest, **words: Any) -> HTTPMessageDelegate:
        """Let a request in to its handler, or refuse it."""
        sessions = len(self.get_sessions("/"))
        origin = request.headers.get("Origin")
        refusal = self._door.refusal(request.path, request.host, origin, sessions)
        if refusal is not None:
            status, text = refusal
            options = {"status": status, "text": text}
            return self.get_handler_delegate(request, RefusedHandler, options)
        if request.path == "/":
            context = {
                "application_context": self.applications["/"],
                "bokeh_websocket_path": "/ws",
            }
            return self.get_handler_delegate(request, PageHandler, context)
        return super().find_handler(request, **words)


async def close_sessions(server: BaseServer) -> None:
    """End the callbacks of all sessions, so that nothing is left half sent.

    A browser that does not take what it is sent is not waited for.
    """
    def end(document: Document) -> None:
        for callback in document.session_callbacks:
            document.remove_periodic_callback(callback)

    endings = [
        asyncio.wait_for(session.with_document_locked(end, session.document), CLOSE_S)
        for session in server.get_sessions()
    ]
    await asyncio.gather(*endings, return_exceptions=True)


def serve(
    modify_document: Callable[[Document], None], sockets: list[socket.socket], door: Door
) -> BaseServer:
    """A server on sockets that listen already, on the current loop; the caller starts it."""
    settings.resources.set_value("server")  # whatever the environment says: no other host
    settings.allowed_ws_origin.set_value(sorted(door.hosts))
    application = Application(FunctionHandler(modify_document, trap_exceptions=False))
    tornado = GuardedTornado(
        door,
        application,
        extra_websocket_origins=sorted(door.hosts),
        sign_sessions=True,
        secret_key=secrets.token_bytes(32),
        generate_session_ids=True,
        include_headers=[],
        include_cookies=[],
        unused_session_lifetime_milliseconds=1000 * UNUSED_S,
        check_unused_sessions_milliseconds=1000 * UNUSED_S // 2,
        session_token_expiration=TOKEN_LASTS_S,
        websocket_max_message_size_bytes=LARGEST_MESSAGE,
        keep_alive_milliseconds=10_000,
    )
    http = HTTPServer(tornado, max_header_size=1 << 16, max_body_size=1 << 16)
    http.add_sockets(sockets)
    return BaseServer(IOLoop.current(), tornado, http)
