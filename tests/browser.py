"""A browser for tests: one for all of them, and which one it is.

Taken is the first of these that starts: what the environment variable CHROMIUM names; Chromium
or Chrome on the search path; Playwright's own download, fetched if need be; on Debian, as root,
the package ``chromium``.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path

import pytest
from playwright.sync_api import Browser, Error, Playwright, sync_playwright

NAMES = ("chromium", "chromium-browser", "google-chrome", "google-chrome-stable")
FLAGS = (
    "--no-sandbox",  # containers and root have none
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
DOWNLOAD_S = 600

Runs = Callable[[list[str]], bool]


def runs(command: list[str]) -> bool:
    """Whether a command ends well in time. What it says is shown if the test fails."""
    try:
        return subprocess.run(command, timeout=DOWNLOAD_S, check=False).returncode == 0
    except (OSError, subprocess.TimeoutExpired):
        return False


def candidates(
    own: Path,
    environment: Mapping[str, str] = os.environ,
    which: Callable[[str], str | None] = shutil.which,
    run: Runs = runs,
    is_root_on_debian: bool | None = None,
) -> Iterator[tuple[str, str]]:
    """What may be taken, in turn: how it was found, and its path.

    ``own`` is where Playwright's own browser is, or would be. Nothing is fetched before the
    caller has refused all that was there.
    """
    if named := environment.get("CHROMIUM"):
        yield "named by CHROMIUM", named
    for name in NAMES:
        if found := which(name):
            yield "on the search path", found
    if own.exists() or run([sys.executable, "-m", "playwright", "install", "chromium"]):
        yield "Playwright's own download", str(own)
    if is_root_on_debian is None:
        is_root_on_debian = os.geteuid() == 0 and Path("/etc/debian_version").exists()
    if is_root_on_debian:
        install = ["apt-get", "install", "-y", "--no-install-recommends", "chromium"]
        if run(["apt-get", "update"]) and run(install) and (found := which("chromium")):
            yield "Debian's package chromium", found


def launch(playwright: Playwright) -> tuple[Browser, str]:
    """The first candidate that starts, and what it is. Fails the test if none does."""
    refused = []
    for how, path in candidates(Path(playwright.chromium.executable_path)):
        try:
            browser = playwright.chromium.launch(executable_path=path, args=list(FLAGS))
        except Error as error:
            refused.append(f"{path} ({how}): {str(error).splitlines()[0]}")
        else:
            return browser, f"{path}, {how}, version {browser.version}"
    pytest.fail(
        "no browser starts; install Chromium, or name one in the environment variable CHROMIUM. "
        + "; ".join(refused)
    )


@pytest.fixture(scope="session")
def browser(request: pytest.FixtureRequest) -> Iterator[Browser]:
    """The browser, and a line that says which it is."""
    with sync_playwright() as playwright:
        found, told = launch(playwright)
        reporter = request.config.pluginmanager.get_plugin("terminalreporter")
        if reporter is not None:
            reporter.ensure_newline()
            reporter.write_line(f"browser: {told}")
        found.new_page().close()  # so that the processes that it keeps in reserve are there
        yield found
        found.close()
