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

from bokeh.server.util import bind_sockets

from acquire.child_process import Child, child_parser
from acquire.errors import BusError, RampsideError
from acquire.run_folder import RunFolder, open_run
from dashboard.hold_link import HoldLink
from dashboard.page.door import MOST_PAGES, Door, close_sessions, serve
from dashboard.page.feed import Feed
from dashboard.page.session import Session
from dashboard.page.store import RunStore
from dashboard.ports import LOOPBACK, page_port

LOOK_S = 0.1


def main(arguments: Sequence[str] | None = None) -> int:
    """Entry point."""
    parser = child_parser("dashboard.page", __doc__)
    parser.add_argument("--port", type=int, default=0, help="0: any free one")
    parser.add_argument("--most-pages", type=int, default=MOST_PAGES, help="open at once")
    options = parser.parse_args(arguments)
    child = Child("page", options.parent)
    try:
        run = open_run(options.run_folder)
        sockets, port = _listen(options.port)
    except RampsideError as error:
        child.complain(str(error))
        return 1
    faulthandler.enable()
    logging.basicConfig(level=logging.ERROR, format="%(name)s: %(message)s")
    child.stop.install()
    door = Door(port, options.most_pages)
    asyncio.run(_show(run, sockets, door, child))
    return 0


async def _show(run: RunFolder, sockets: list[socket.socket], door: Door, child: Child) -> None:
    store = RunStore(run.run_id, run.rig)
    feed = Feed(run, store)
    link = HoldLink(run)
    server = serve(lambda document: Session(store, link).open(document), sockets, door)
    server.start()
    feed.start()
    print(f"ready http://{LOOPBACK}:{door.port}/", flush=True)
    try:
        while child.wanted():
            await asyncio.sleep(LOOK_S)
    finally:
        await close_sessions(server)
        server.stop(wait=False)
        feed.close()
        link.close()


def _listen(port: int) -> tuple[list[socket.socket], int]:
    wanted = page_port(port)
    try:
        return bind_sockets(LOOPBACK, wanted)
    except OSError as error:
        raise BusError(
            f"Port {wanted} can't be used ({error.strerror}): choose another with --port N."
        ) from None


if __name__ == "__main__":
    sys.exit(main())
