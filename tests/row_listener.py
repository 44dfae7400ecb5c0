"""Listens to a stream in a process of its own and checks that every row comes once, in order.

Prints ``there`` with the first row; once row ``last`` has come, how many rows it had to ask for and
the most memory that it ever had, in kB.
"""

import resource
import sys

from row_publisher import TABLE

from acquire.bus import Endpoint, Subscriber


def main(publish: str, answer: str, last: int) -> None:
    expected = 0
    with Subscriber("run", {"a": Endpoint(publish, answer)}, {"a": TABLE}) as subscriber:
        while expected <= last:
            for _, row in subscriber.receive(0.1):
                if row[0] != expected:
                    sys.exit(f"row {row[0]} in the place of {expected}")
                if expected == 0:
                    print("there", flush=True)
                expected += 1
        filled = subscriber.health()["a"].filled
    print(filled, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss, flush=True)


if __name__ == "__main__":
    main(*sys.argv[1:3], int(sys.argv[3]))
