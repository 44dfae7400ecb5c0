"""Which browser the tests take: in which order, and what is fetched only when it must be."""

from __future__ import annotations

import sys
from pathlib import Path

from browser import candidates

FETCH = [sys.executable, "-m", "playwright", "install", "chromium"]


class Machine:
    """A machine with some browsers on its path, and the commands that were run on it."""

    def __init__(self, *on_path: str, fails: tuple[str, ...] = ()) -> None:
        self.on_path = set(on_path)
        self.commands: list[list[str]] = []
        self._fails = fails

    def which(self, name: str) -> str | None:
        return f"/usr/bin/{name}" if name in self.on_path else None

    def run(self, command: list[str]) -> bool:
        self.commands.append(command)
        if "apt-get" in command and "install" in command:
            self.on_path.add("chromium")
        return not any(word in command for word in self._fails)

    def candidates(
        self, own: Path, environment: dict[str, str] | None = None, root: bool = False
    ) -> list[tuple[str, str]]:
        return list(candidates(own, environment or {}, self.which, self.run, root))


def test_a_browser_that_is_named_comes_first_and_nothing_is_fetched_before_all_failed(
    tmp_path: Path,
) -> None:
    machine = Machine("google-chrome", "chromium")
    found = candidates(tmp_path / "none", {"CHROMIUM": "/x"}, machine.which, machine.run, True)
    taken = [next(found) for _ in range(3)]
    assert [path for _, path in taken] == ["/x", "/usr/bin/chromium", "/usr/bin/google-chrome"]
    assert machine.commands == []


def test_playwrights_own_is_fetched_only_if_it_is_not_there(tmp_path: Path) -> None:
    own = tmp_path / "chrome"
    machine = Machine()
    assert machine.candidates(own) == [("Playwright's own download", str(own))]
    assert machine.commands == [FETCH]
    own.touch()
    machine.commands.clear()
    assert machine.candidates(own) == [("Playwright's own download", str(own))]
    assert machine.commands == []


def test_the_package_is_the_last_resort_and_for_root_only(tmp_path: Path) -> None:
    machine = Machine(fails=("playwright",))
    assert machine.candidates(tmp_path / "none") == []
    assert machine.candidates(tmp_path / "none", root=True) == [
        ("Debian's package chromium", "/usr/bin/chromium")
    ]
    assert [command[:2] for command in machine.commands[-2:]] == [
        ["apt-get", "update"],
        ["apt-get", "install"],
    ]
