"""Notes entries in the instruments.json of a run, as several readers at once do."""

import sys

from acquire.run_folder import open_run


def main(path: str, reader: str, count: int) -> None:
    run = open_run(path)
    for number in range(count):
        run.note_instrument({"reader": reader, "seq": number, "identity": "x" * 500})


if __name__ == "__main__":
    main(sys.argv[1], sys.argv[2], int(sys.argv[3]))
