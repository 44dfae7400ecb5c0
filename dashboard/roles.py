"""The processes of a run: how each is called, started, and known to be ready."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping

from acquire.config import Rig
from acquire.config.reader import ReaderSection
from acquire.readings import stream_of
from acquire.run_folder import RunFolder
from dashboard.child import python
from dashboard.page_address import PageAddress
from dashboard.ports import listens
from dashboard.supervisor import Role

ESTIMATOR, PAGE, LABORATORY = "estimator", "page", "simulated laboratory"

LastHeard = Callable[[str], float | None]
"""Stream to the ``time.monotonic()`` of its publisher's last sign of life."""


def reader_role(reader: ReaderSection) -> str:
    """The role of whoever puts this reader's readings on record."""
    return f"reader {reader.name}" if reader.elsewhere is None else f"relay of {reader.name}"


def roles_of(
    run: RunFolder, page_port: int, last_heard: LastHeard, place: PageAddress
) -> list[Role]:
    """Readers, or relays where they run elsewhere, estimator and page of a run."""
    roles = [
        Role(
            reader_role(reader),
            python(
                "acquire.reader" if reader.elsewhere is None else "acquire.relay",
                run.path,
                reader.name,
            ),
            _heard(last_heard, stream_of(reader.name)),
        )
        for reader in run.rig.readers
    ]
    roles.append(
        Role(ESTIMATOR, python("analyse.service", run.path), _heard(last_heard, "estimates"))
    )
    roles.append(
        Role(
            PAGE,
            python("dashboard.page", run.path, "--port", page_port, *place.arguments()),
            lambda since: listens(page_port, place.address),
        )
    )
    return roles


def laboratory_role(config: object, ports: Iterable[int]) -> Role:
    """The simulated laboratory out of a configuration file, listening on ``ports``."""
    wanted = tuple(ports)
    return Role(
        LABORATORY,
        python("acquire.laboratory", config),
        lambda since: all(listens(port) for port in wanted),
    )


def laboratory_ports(rig: Rig) -> tuple[int, ...]:
    """The fixed ports of the simulated instruments; empty without a laboratory."""
    if rig.laboratory is None:
        return ()
    ports = [rig.laboratory.magnet.port, *(lockin.port for lockin in rig.laboratory.lockins)]
    return tuple(port for port in ports if port)


def with_ports(config: bytes, new: Mapping[int, int]) -> bytes:
    """The same configuration with port numbers replaced wherever they stand by themselves."""
    if not new:
        return config
    pattern = re.compile(rb"(?<![\w.])(" + b"|".join(b"%d" % old for old in new) + rb")(?![\w.])")
    return pattern.sub(lambda found: b"%d" % new[int(found[1])], config)


def _heard(last_heard: LastHeard, stream: str) -> Callable[[float], bool]:
    def ready(since: float) -> bool:
        heard = last_heard(stream)
        return heard is not None and heard > since

    return ready
