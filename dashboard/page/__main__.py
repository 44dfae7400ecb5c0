"""The page of a run, as a process: ``python -m dashboard.page RUN_FOLDER --port N``.

Tells ``ready ADDRESS`` on stdout once the page can be opened. Ends in order on SIGTERM, and when
its parent has ended. Exit status 0, or 1 with one sentence on stderr.
"""

from __future__ import annotations

import asyncio
import faulthandler
import logging
import socket
import sys
from collections.abc import Sequence
from pathlib import Path

from bokeh.server.util import bind_sockets

from acquire.child_process import Child, child_parser
from acquire.errors import BusError, RampsideError
from acquire.run_folder import RunFolder, open_run
from dashboard.hold_link import HoldLink
from dashboard.page.door import MOST_PAGES, Door, close_sessions, serve
from dashboard.page.feed import Feed
from dashboard.page.login import Logins
from dashboard.page.session import Session
from dashboard.page.store import RunStore
from dashboard.page_address import page_address
from dashboard.ports import LOOPBACK, page_port
from dashboard.secret_file import read_secret

LOOK_S = 0.1


def main(arguments: Sequence[str] | None = None) -> int:
    """Entry point."""
    parser = child_parser("dashboard.page", __doc__)
    parser.add_argument("--port", type=int, default=0, help="0: any free one")
    parser.add_argument("--page-address", default=LOOPBACK)
    parser.add_argument("--page-secret", metavar="FILE", type=Path)
    parser.add_argument("--most-pages", type=int, default=MOST_PAGES, help="open at once")
    options = parser.parse_args(arguments)
    child = Child("page", options.parent)
    try:
        run = open_run(options.run_folder)
        place = page_address(options.page_address, options.page_secret)
        secret = None if place.secret is None else read_secret(place.secret)
        sockets, port = _listen(options.port, place.address)
    except RampsideError as error:
        child.complain(str(error))
        return 1
    faulthandler.enable()
    logging.basicConfig(level=logging.ERROR, format="%(name)s: %(message).300s")
    # Bokeh tells each message that makes no sense at length; a page can't send such messages.
    logging.getLogger("bokeh.server.views.ws").setLevel(logging.CRITICAL)
    child.stop.install()
    logins = None if secret is None else Logins(secret, port)
    door = Door(port, options.most_pages, place.names, logins)
    asyncio.run(_show(run, sockets, door, child, place.url(port)))
    return 0


async def _show(
    run: RunFolder, sockets: list[socket.socket], door: Door, child: Child, url: str
) -> None:
    store = RunStore(run.run_id, run.rig)
    feed = Feed(run, store)
    link = HoldLink(run)
    server = serve(lambda document: Session(store, link).open(document), sockets, door)
    server.start()
    feed.start()
    print(f"ready {url}/", flush=True)
    try:
        while child.wanted():
            await asyncio.sleep(LOOK_S)
    finally:
        await close_sessions(server)
        server.stop(wait=False)
        feed.close()
        link.close()


def _listen(port: int, address: str) -> tuple[list[socket.socket], int]:
    wanted = page_port(port, address)
    try:
        return bind_sockets(address, wanted)
    except OSError as error:
        raise BusError(
            f"Port {wanted} can't be used ({error.strerror}): choose another with --port N."
        ) from None


if __name__ == "__main__":
    sys.exit(main())
