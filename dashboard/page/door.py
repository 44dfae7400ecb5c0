"""Who is let in: the decisions about requests, and the server that asks for them.

What the page shows is the laboratory's own, and it may ask for the field to be held. A request must name
this server as its host (so that no other site can reach it under a name of its own), a websocket
must come from a page of this server, and there is a limit to the pages open at once. Where a secret
is wanted, nothing but the login is served without it. Sessions are signed with a key that is made at
each start.
"""

from __future__ import annotations

import asyncio
import secrets
import socket
from collections.abc import Callable, Iterable
from typing import Any

from bokeh.application import Application
from bokeh.application.handlers.function import FunctionHandler
from bokeh.document import Document
from bokeh.embed.server import server_html_page_for_session
from bokeh.server.server import BaseServer
from bokeh.server.tornado import BokehTornado
from bokeh.server.views.doc_handler import DocHandler
from bokeh.settings import settings
from tornado.httpserver import HTTPServer
from tornado.httputil import HTTPHeaders, HTTPMessageDelegate, HTTPServerRequest
from tornado.ioloop import IOLoop
from tornado.web import OutputTransform, RequestHandler

from dashboard.page.incoming import CarefulSocket
from dashboard.page.login import LoginHandler, Logins
from dashboard.ports import LOOPBACK

MOST_PAGES = 24
LARGEST_MESSAGE = 1 << 20
CONNECTIONS_A_PAGE = 2  # while one breaks and the next is made
UNUSED_S = 10
IDLE_S = 60.0
PLAIN_PORT = 80  # which browsers leave out of the host
CLOSE_S = 0.3
TOKEN_LASTS_S = 24 * 3600
"""How long an opened page may come back after its connection broke: a night, a sleeping laptop."""

PLAIN_POLICY = (
    "default-src 'none'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'self'; "
    "frame-ancestors 'none'"
)
PAGE_POLICY = (
    "default-src 'none'; script-src 'self' 'nonce-{nonce}'; style-src 'self' 'unsafe-inline'; "
    "img-src 'self' data: blob:; font-src 'self' data:; connect-src 'self' ws://{host}; "
    "base-uri 'none'; form-action 'self'; frame-ancestors 'none'"
)
HEADERS = {
    "X-Frame-Options": "DENY",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "same-origin",  # with no-referrer a browser hides whence the login comes
    "Cross-Origin-Resource-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Server": "rampside",
}
_OPEN_TO_ALL = ("/login", "/favicon.ico")


class Door:
    """Decides about one request. ``port`` is the server's own.

    ``names``: the hosts under which it may be asked; ``logins``: who is in, None if everybody is.
    """

    def __init__(
        self, port: int, most_pages: int = MOST_PAGES,
        names: Iterable[str] = (LOOPBACK, "localhost"), logins: Logins | None = None,
    ) -> None:  # fmt: skip
        self.port, self.most_pages, self.logins = port, most_pages, logins
        hosts = [f"{name}:{port}" for name in names]
        hosts += [name for name in names if port == PLAIN_PORT]
        self.hosts = tuple(dict.fromkeys(hosts))
        self.origins = frozenset(f"http://{host}" for host in self.hosts)

    def refusal(
        self, path: str, host: str, origin: str | None, open_pages: int, is_in: bool = True
    ) -> tuple[int, str] | None:
        """Status and sentence for a request that is refused; None for one that is let in.

        ``open_pages``: sessions, or for a websocket the connections, that are open.
        """
        if host.lower() not in self.hosts:
            return 403, f"This page is served as {' or '.join(self.hosts)} only."
        if origin is not None and origin.lower() not in self.origins:
            return 403, "Only the page itself may ask here."
        if self.logins is not None and not is_in and path not in _OPEN_TO_ALL:
            return 403, "Log in first: the page is at /."
        if path == "/ws":
            if origin is None:
                return 403, "Only the page itself may connect here."
            return self.full(open_pages, self.most_pages * CONNECTIONS_A_PAGE)
        if path == "/":
            return self.full(open_pages, self.most_pages)
        if path.startswith("/static/") or path == "/favicon.ico":
            return None
        if path == "/login" and self.logins is not None:
            return None
        return 404, "There is nothing here; the page is at /."

    def full(self, open_pages: int, most: int) -> tuple[int, str] | None:
        """A refusal if as many are open as may be."""
        if open_pages < most:
            return None
        return 503, f"{self.most_pages} pages are open already: close some, then reload."


class PageHandler(DocHandler):
    """Serves the page itself; only the scripts that stand in it as it is made here may run."""

    async def get(self, *words: Any, **more: Any) -> None:
        """Answer with the page, if there is still room: many may have asked at the same moment."""
        if (refusal := self.application.full()) is not None:
            self.set_status(refusal[0])
            self.set_header("Content-Type", "text/plain; charset=utf-8")
            self.finish(refusal[1] + "\n")
            return
        session = await self.get_session()
        document = session.document
        page = server_html_page_for_session(
            session, resources=self.application.resources(), title=document.title,
            template=document.template, template_variables=document.template_variables,
        )  # fmt: skip
        nonce = secrets.token_urlsafe(16)
        policy = PAGE_POLICY.format(host=self.request.host, nonce=nonce)
        self.set_header("Content-Security-Policy", policy)
        self.write(page.replace("<script", f'<script nonce="{nonce}"'))


class RefusedHandler(RequestHandler):
    """Says why a request is refused, or where to go instead."""

    def initialize(self, status: int, text: str, instead: str = "") -> None:
        """Called with what :meth:`Door.refusal` said."""
        self._refusal, self._instead = (status, text), instead

    def prepare(self) -> None:
        """Answer, whatever the method is."""
        self.set_status(self._refusal[0])
        self.set_header("Content-Type", "text/plain; charset=utf-8")
        if self._instead:
            self.set_header("Location", self._instead)
        self.finish(self._refusal[1] + "\n")


class CarefulHeaders(OutputTransform):
    """Adds to every answer the headers that keep a browser from more than it is meant to do."""

    def __init__(self, request: HTTPServerRequest) -> None:
        self._lasts = request.path.startswith("/static/")

    def transform_first_chunk(
        self, status_code: int, headers: HTTPHeaders, chunk: bytes, finishing: bool
    ) -> tuple[int, HTTPHeaders, bytes]:
        """Called before an answer goes out."""
        for name, value in HEADERS.items():
            headers[name] = value
        if "Content-Security-Policy" not in headers:
            headers["Content-Security-Policy"] = PLAIN_POLICY
        if not self._lasts:
            headers["Cache-Control"] = "no-store"
        return status_code, headers, chunk


class GuardedTornado(BokehTornado):
    """Bokeh's application with a :class:`Door` in front of all its handlers."""

    def __init__(self, door: Door, application: Application, **options: Any) -> None:
        self._door = door
        super().__init__({"/": application}, **options)
        self.add_transform(CarefulHeaders)

    def find_handler(self, request: HTTPServerRequest, **words: Any) -> HTTPMessageDelegate:
        """Let a request in to its handler, or refuse it."""
        door, path = self._door, request.path
        is_in = door.logins is None or door.logins.is_in(request)
        open_pages = len(self._clients) if path == "/ws" else self._sessions()
        origin = request.headers.get("Origin")
        if path == "/login" and request.method == "POST":
            origin = origin or "none"  # a browser says where a form comes from
        refusal = door.refusal(path, request.host, origin, open_pages, is_in)
        if refusal is not None:
            status, text = refusal
            options = {"status": status, "text": text}
            if status == 403 and path == "/" and not is_in and request.host in door.hosts:
                options |= {"status": 303, "instead": "/login"}
            return self.get_handler_delegate(request, RefusedHandler, options)
        if path == "/login":
            return self.get_handler_delegate(request, LoginHandler, {"logins": door.logins})
        context = {"application_context": self.applications["/"], "bokeh_websocket_path": "/ws"}
        if path == "/":
            return self.get_handler_delegate(request, PageHandler, context)
        if path == "/ws":
            return self.get_handler_delegate(request, CarefulSocket, context)
        return super().find_handler(request, **words)

    def full(self) -> tuple[int, str] | None:
        """A refusal if no more sessions may be made."""
        return self._door.full(self._sessions(), self._door.most_pages)

    def _sessions(self) -> int:
        """How many sessions there are, those included that are just being made."""
        context = self.applications["/"]
        return len(list(context.sessions)) + len(context._pending_sessions)


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
    settings.allowed_ws_origin.set_value(list(door.hosts))
    application = Application(FunctionHandler(modify_document, trap_exceptions=False))
    tornado = GuardedTornado(
        door,
        application,
        extra_websocket_origins=list(door.hosts),
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
    http = HTTPServer(
        tornado, max_header_size=1 << 16, max_body_size=1 << 16, max_buffer_size=4 * LARGEST_MESSAGE,
        idle_connection_timeout=IDLE_S,
    )  # fmt: skip
    http.add_sockets(sockets)
    return BaseServer(IOLoop.current(), tornado, http)
