"""``rampside page RUN``: a run in the browser, while it goes on or long after."""

from __future__ import annotations

import argparse

from acquire.run_folder import open_run
from dashboard.bad_end import close_if_ended_badly
from dashboard.browser import open_page
from dashboard.child import python
from dashboard.interrupts import asked_to_end
from dashboard.page_address import page_address
from dashboard.ports import listens, page_port
from dashboard.roles import PAGE
from dashboard.supervisor import ProcessNews, Role, Supervisor

LOOK_S = 0.2
END_S = 1.0


def run(arguments: argparse.Namespace) -> int:
    """Show the run until Ctrl-C; exit status 0."""
    run_folder = open_run(arguments.run_folder)
    if told := close_if_ended_badly(run_folder, "rampside page"):
        print(told, flush=True)
    place = page_address(arguments.page_address, arguments.page_secret)
    port = page_port(arguments.port, place.address)

    def tell(news: ProcessNews) -> None:
        if news.happening != "ready":
            print(f"{news.text}.", flush=True)
        elif arguments.no_browser or not open_page(place.url(port)):
            print("Open it in a browser.", flush=True)

    command = python("dashboard.page", run_folder.path, "--port", port, *place.arguments())
    page = Role(PAGE, command, lambda since: listens(port, place.address))
    supervisor = Supervisor([page], tell, lambda role, line: print(line, flush=True))
    print(f"Page: {place.told(port)}\nRun:  {run_folder.path}\nCtrl-C ends it.", flush=True)
    with asked_to_end() as wish:
        try:
            supervisor.start()
            while not wish.wait(LOOK_S):
                supervisor.poll()
            supervisor.stop([PAGE], END_S)
        finally:
            supervisor.close()
    return 0
