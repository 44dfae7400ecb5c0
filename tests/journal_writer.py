"""Writes a journal as fast as it can until it is killed, and prints the number of each row."""

import sys

from acquire.journal import Journal
from acquire.tables import SEQ, TIME, Column, Table

TABLE = Table("a", "a.csv", "", (SEQ, TIME, Column("detail", "string"), Column("x", "number")))


def main(path: str) -> None:
    with Journal(path, TABLE) as journal:
        while True:
            print(journal.append((1.5, "x" * 300, 2.5)), flush=True)


if __name__ == "__main__":
    main(sys.argv[1])
