"""Publishes rows as fast as asked until it is killed, going on where its journal ends.

Tells on stdout that it is there, and goes on while its stdin is open.
"""

import sys
import threading

from acquire.bus import Endpoint, Publisher
from acquire.journal import Journal
from acquire.tables import SEQ, TIME, Column, Table

TABLE = Table("a", "a.csv", "", (SEQ, TIME, Column("detail", "string"), Column("x", "number")))


def main(path: str, publish: str, answer: str, last: int) -> None:
    ended = threading.Event()
    threading.Thread(target=lambda: (sys.stdin.read(), ended.set())).start()
    with (
        Journal(path, TABLE) as journal,
        Publisher("run", TABLE, journal, Endpoint(publish, answer)) as publisher,
    ):
        print("there", flush=True)
        while not ended.wait(0.0005):
            if journal.next_seq <= last:
                publisher.publish(journal.next_seq / 7, "x" * (journal.next_seq % 90), 1e-9)


if __name__ == "__main__":
    main(*sys.argv[1:4], int(sys.argv[4]))
