"""The page's server inside a test, so that what it holds can be counted; asked by plain sockets."""

from __future__ import annotations

import asyncio
import json
import re
import socket
from collections.abc import AsyncIterator, Callable, Coroutine
from concurrent.futures import ThreadPoolExecutor
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from typing import Any

from bokeh.server.server import BaseServer
from bokeh.server.util import bind_sockets
from tornado.httpclient import HTTPRequest
from tornado.websocket import WebSocketClientConnection, websocket_connect

from dashboard.page.door import Door, close_sessions, serve
from dashboard.page.session import Session
from dashboard.page.store import RunStore

SOON_S = 60.0


class Line:
    """A websocket to the server, which remembers that it was closed."""

    def __init__(self, connection: WebSocketClientConnection) -> None:
        self._connection = connection
        self._ended = False

    async def read(self) -> str | bytes | None:
        """The next piece; None once it is closed."""
        if not self._ended:
            piece = await asyncio.wait_for(self._connection.read_message(), SOON_S)
            self._ended = piece is None
            return piece
        return None

    async def write(self, piece: str | bytes) -> None:
        """Send a piece."""
        await self._connection.write_message(piece, binary=isinstance(piece, bytes))

    def hang_up(self) -> None:
        """Begin to end it."""
        self._connection.close()

    async def close(self) -> None:
        """End it, and wait until it has ended."""
        self.hang_up()
        await self.read_all()

    async def read_all(self) -> None:
        """Read until it has ended."""
        while await self.read() is not None:
            pass


@dataclass
class Served:
    """A running server, and the pages that were opened, in order."""

    server: BaseServer
    port: int
    pages: list[Session] = field(default_factory=list)
    lines: list[Line] = field(default_factory=list)

    async def get(self, path: str = "/") -> tuple[int, str]:
        """Status and text of an answer."""
        reader, writer = await asyncio.open_connection("127.0.0.1", self.port)
        line = f"GET {path} HTTP/1.1\r\nHost: 127.0.0.1:{self.port}\r\nConnection: close\r\n\r\n"
        writer.write(line.encode())
        answer = (await reader.read()).decode()
        writer.close()
        await writer.wait_closed()
        return int(answer.split()[1]), answer

    async def token(self) -> str:
        """Open a page as far as its token."""
        status, text = await self.get()
        assert status == 200
        found = re.search(r'"token":"([\w.=-]+)"', text)
        assert found is not None
        return found[1]

    async def connect(self, token: str = "") -> Line:
        """Open a page, or take one that was opened as far as its token, and its websocket."""
        request = HTTPRequest(
            f"ws://127.0.0.1:{self.port}/ws", headers={"Origin": f"http://127.0.0.1:{self.port}"}
        )
        token = token or await self.token()
        line = Line(await websocket_connect(request, subprotocols=["bokeh", token]))
        self.lines.append(line)
        assert (await heard(line))[0]["msgtype"] == "ACK"
        return line

    async def frozen(self) -> socket.socket:
        """Open a page whose websocket is not read from any more."""
        line = socket.socket()
        line.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        line.setblocking(False)
        loop = asyncio.get_running_loop()
        await loop.sock_connect(line, ("127.0.0.1", self.port))
        host, token = f"127.0.0.1:{self.port}", await self.token()
        lines = (
            "GET /ws HTTP/1.1", f"Host: {host}", f"Origin: http://{host}", "Upgrade: websocket",
            "Connection: Upgrade", "Sec-WebSocket-Version: 13",
            "Sec-WebSocket-Key: MDEyMzQ1Njc4OWFiY2RlZg==", f"Sec-WebSocket-Protocol: bokeh, {token}",
        )  # fmt: skip
        await loop.sock_sendall(line, ("\r\n".join(lines) + "\r\n\r\n").encode())
        assert b" 101 " in await loop.sock_recv(line, 200)
        return line

    def buffered(self, page: int) -> int:
        """Bytes that wait in this process to be sent to a page."""
        total = 0
        for client in self.server._tornado._clients:
            if client.session.document is self.documents[page]:
                total += len(client._socket.ws_connection.stream._write_buffer)
        return total

    @property
    def documents(self) -> list[Any]:
        """The pages' documents, in the order of :attr:`pages`."""
        return [page._beat.document for page in self.pages]


@asynccontextmanager
async def serving(store: RunStore, most_pages: int = 24) -> AsyncIterator[Served]:
    """A server of this store's page on a free port."""
    sockets, port = bind_sockets("127.0.0.1", 0)
    pages: list[Session] = []

    def open_page(document: Any) -> None:
        pages.append(Session(store))
        pages[-1].open(document)

    server = serve(open_page, sockets, Door(port, most_pages))
    server.start()
    served = Served(server, port, pages)
    try:
        yield served
    finally:
        for line in served.lines:
            await line.close()
        await close_sessions(server)
        server.stop(wait=False)
        for one in sockets:
            one.close()


async def heard(line: Line) -> tuple[dict[str, Any], dict[str, Any]]:
    """Header and content of the next message with which the server answers or begins."""
    while True:
        header = await line.read()
        if header is None:
            return {"msgtype": "CLOSED"}, {}
        if not isinstance(header, str) or "msgtype" not in header:
            continue  # a piece of a change
        await line.read()
        content = await line.read()
        found = json.loads(header)
        if found["msgtype"] != "PATCH-DOC":
            return found, json.loads(content or "{}")


async def say(line: Line, msgtype: str, content: object) -> str:
    """Send a message; the type of what comes back."""
    for piece in ({"msgid": "1", "msgtype": msgtype}, {}, content):
        await line.write(json.dumps(piece))
    return str((await heard(line))[0]["msgtype"])


def apart(main: Callable[[], Coroutine[Any, Any, None]]) -> None:
    """Run it in a thread of its own: this one may have a loop already, that of the browser."""
    with ThreadPoolExecutor(1) as pool:
        pool.submit(lambda: asyncio.run(main())).result()


async def until(condition: Callable[[], bool], what: str) -> None:
    """Wait for a condition."""
    deadline = asyncio.get_running_loop().time() + SOON_S
    while not condition():
        assert asyncio.get_running_loop().time() < deadline, what
        await asyncio.sleep(0.01)
