"""A page that others may reach: refused without a secret, and what the secret is guarded by."""

from __future__ import annotations

import http.client
import os
import re
import stat
from collections.abc import Iterator
from pathlib import Path
from types import SimpleNamespace
from typing import Any
from urllib.parse import urlencode

import pytest
from made_run import MadeRun, PageProcess, estimates, ramp
from playwright.sync_api import Browser, expect
from tornado.web import create_signed_value

from acquire.errors import BusError, UsageError
from dashboard.cli import main
from dashboard.page.login import MOST_PEERS, MOST_WRONG, WITHIN_S, Logins
from dashboard.page_address import PageAddress, page_address
from dashboard.ports import page_port
from dashboard.secret_file import LONGEST, make_if_missing, read_secret

SECRET = "correct horse battery staple"


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """A secret that is kept well."""
    path = tmp_path / "secret"
    path.write_text(f"{SECRET}\n")
    path.chmod(0o600)
    return path


# The file.


def test_a_secret_is_made_once_for_its_owner_and_never_written_over(tmp_path: Path) -> None:
    path = tmp_path / "secret"
    before = os.umask(0)
    try:
        assert make_if_missing(path)
    finally:
        os.umask(before)
    assert stat.S_IMODE(path.stat().st_mode) == 0o600
    made = path.read_bytes()
    assert re.fullmatch(rb"[\w-]{32}\n", made)
    assert not make_if_missing(path) and path.read_bytes() == made
    assert read_secret(path) == made.decode().strip()
    assert [one.name for one in tmp_path.iterdir()] == ["secret"]
    make_if_missing(tmp_path / "another")
    assert (tmp_path / "another").read_bytes() != made


@pytest.mark.parametrize("mode", [0o640, 0o604, 0o620, 0o660, 0o601, 0o777])
def test_a_secret_that_is_open_to_others_is_refused(file: Path, mode: int) -> None:
    file.chmod(mode)
    with pytest.raises(UsageError, match=f"is open to others .mode {mode:o}.: chmod 600"):
        page_address("127.0.0.1", file)
    assert stat.S_IMODE(file.stat().st_mode) == mode and SECRET in file.read_text()


@pytest.mark.parametrize(
    "content", [b"", b"short\n", b"\xff" * 40, b"x" * (LONGEST + 1), b"one line of it\nand another\n"]
)
def test_what_is_no_secret_is_refused_and_left_alone(file: Path, content: bytes) -> None:
    file.write_bytes(content)
    with pytest.raises(UsageError, match="The secret's file"):
        page_address("127.0.0.1", file)
    assert file.read_bytes() == content


def test_a_secret_that_can_not_be_kept_is_told(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="can't be made"):
        page_address("127.0.0.1", tmp_path / "no" / "secret")
    with pytest.raises(UsageError, match="can't be read .Is a directory."):
        page_address("127.0.0.1", tmp_path)
    os.mkfifo(tmp_path / "pipe", 0o600)  # would wait for its other end
    with pytest.raises(UsageError, match="is not a file"):
        page_address("127.0.0.1", tmp_path / "pipe")


# The address.


@pytest.mark.parametrize("address", ["0.0.0.0", "::", "192.0.2.7", "[2001:db8::1]"])
def test_others_are_let_in_with_a_secret_only(address: str, file: Path) -> None:
    with pytest.raises(UsageError, match="--page-secret FILE"):
        page_address(address)
    found = page_address(address, file)
    assert found.secret == file
    told = found.told(5410)
    assert "in clear text" in told and "SSH tunnel" in told and SECRET not in told
    assert found.arguments()[-1] == str(file)


def test_names_under_which_the_page_may_be_asked_are_explicit(file: Path) -> None:
    assert page_address() == PageAddress() == page_address("127.0.0.1")
    assert page_address("localhost").names[0] in ("127.0.0.1", "[::1]")
    assert page_address("::1").names == ("[::1]", "localhost")
    assert page_address("::1").url(80) == "http://[::1]:80"
    assert "192.0.2.7" in page_address("192.0.2.7", file).names
    everywhere = page_address("0.0.0.0", file).names
    assert {"127.0.0.1", "localhost"} < set(everywhere)
    assert not any("*" in name or name in ("0.0.0.0", "") for name in everywhere)
    assert "clear text" not in page_address("127.0.0.1", file).told(5410)


def test_an_address_that_is_none_is_told(file: Path) -> None:
    with pytest.raises(UsageError, match="no address of this computer"):
        page_address("no such host.invalid", file)
    with pytest.raises(BusError, match="choose another --page-address"):
        page_port(0, "192.0.2.7")  # RFC 5737: nobody's


@pytest.mark.parametrize("command", ["watch", "demo", "page"])
def test_the_command_line_refuses_before_anything_is_started(
    command: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with MadeRun(tmp_path, live=False) as made:
        what = {"watch": [made.path / "config.toml"], "demo": [], "page": [made.path]}[command]
        words = [command, *map(str, what), "--port", "0", "--no-browser", "--page-address", "0.0.0.0"]
        assert main(words) == 2
        told = capsys.readouterr()
        assert told.out == "" and told.err.count("\n") == 1
        assert "--page-secret FILE" in told.err
        loose = tmp_path / "loose"
        loose.write_text(SECRET)
        loose.chmod(0o644)
        assert main([*words, "--page-secret", str(loose)]) == 2
        assert "chmod 600" in capsys.readouterr().err


# The login.


class Clock:
    now = 0.0

    def __call__(self) -> float:
        return self.now


def with_cookie(logins: Logins, value: str | None) -> bool:
    request: Any = SimpleNamespace(cookies={})
    if value is not None:
        request.cookies[logins.cookie] = SimpleNamespace(value=value)
    return logins.is_in(request)


def test_guesses_are_slow_and_what_is_remembered_of_them_is_bounded() -> None:
    clock = Clock()
    logins = Logins(SECRET, 5410, clock)
    assert logins.try_secret("a", SECRET) == "right"
    assert [logins.try_secret("a", f"{n}") for n in range(MOST_WRONG)] == ["wrong"] * MOST_WRONG
    assert logins.try_secret("a", SECRET) == "wait"  # nobody learns whether it was right
    assert logins.try_secret("b", SECRET) == "right"
    for number in range(3 * MOST_PEERS):
        logins.try_secret(f"peer {number}", "wrong")
    assert len(logins._wrong) == MOST_PEERS
    assert logins.try_secret("c", SECRET) == "wait"
    clock.now += WITHIN_S
    assert logins.try_secret("a", f" {SECRET}\n") == "right"
    assert logins._wrong == {}
    assert logins.try_secret("a", "\udcff" + SECRET) == "wrong"


def test_a_cookie_can_not_be_made_without_the_secret() -> None:
    logins = Logins(SECRET, 5410)
    good = logins.new_cookie()
    assert with_cookie(logins, good)
    assert with_cookie(Logins(SECRET, 5410), good)  # after a restart
    assert not with_cookie(Logins(SECRET, 5411), good)  # another page
    assert not with_cookie(Logins(SECRET + "x", 5410), good)
    forged = create_signed_value(SECRET, logins.cookie, "in").decode()
    old = create_signed_value(logins._key, logins.cookie, "in", clock=lambda: 1e9).decode()
    other = create_signed_value(logins._key, logins.cookie, "out").decode()
    for value in (forged, old, other, good[:-1], good.replace("2|1", "1|1"), "", "in", "x" * 5000):
        assert not with_cookie(logins, value)
    assert not with_cookie(logins, None)


# A page that is served.


@pytest.fixture(scope="module")
def guarded(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[PageProcess, Path, Path]]:
    folder = tmp_path_factory.mktemp("guarded")
    made = MadeRun(folder, live=False)
    made.estimate(*estimates(ramp(1.0, 20)))
    made.end()
    file = folder / "secret"
    make_if_missing(file)
    process = PageProcess(made.path, 0, "--page-secret", file)
    process.address()
    yield process, file, made.path
    assert process.end() == 0
    assert process.errors == [""]


def port_of(process: PageProcess) -> int:
    return int(process.address().rstrip("/").rpartition(":")[2])


def ask(
    port: int, path: str, method: str = "GET", body: str | None = None, **headers: str
) -> tuple[int, dict[str, str], str]:
    """Status, headers and text."""
    line = http.client.HTTPConnection("127.0.0.1", port, timeout=60)
    try:
        given = {name.replace("_", "-"): value for name, value in headers.items()}
        if body is not None:
            given.setdefault("Content-Type", "application/x-www-form-urlencoded")
        line.request(method, path, body, given)
        reply = line.getresponse()
        return reply.status, dict(reply.headers), reply.read().decode()
    finally:
        line.close()


def log_in(port: int, secret: str, **headers: str) -> tuple[int, dict[str, str], str]:
    headers.setdefault("Origin", f"http://127.0.0.1:{port}")
    return ask(port, "/login", "POST", urlencode({"secret": secret}), **headers)


def test_nothing_but_the_login_is_served_without_the_secret(
    guarded: tuple[PageProcess, Path, Path]
) -> None:
    port = port_of(guarded[0])
    assert ask(port, "/")[0::2] == (303, "Log in first: the page is at /.\n")
    assert ask(port, "/")[1]["Location"] == "/login"
    for path in ("/ws", "/static/js/bokeh.min.js", "/x", "/metadata"):
        assert ask(port, path)[0] == 403, path
    websocket = {"Connection": "Upgrade", "Upgrade": "websocket", "Sec_WebSocket_Version": "13",
                 "Sec_WebSocket_Key": "MDEyMzQ1Njc4OWFiY2RlZg==",
                 "Origin": f"http://127.0.0.1:{port}"}  # fmt: skip
    assert ask(port, "/ws", **websocket)[0] == 403
    assert ask(port, "/", Cookie=f"rampside_{port}=in")[0] == 303
    status, headers, text = ask(port, "/login")
    assert (status, 'type="password"' in text) == (200, True)
    assert "frame-ancestors 'none'" in headers["Content-Security-Policy"]
    assert "script-src" not in headers["Content-Security-Policy"]  # so that none runs
    assert headers["Cache-Control"] == "no-store" and headers["X-Frame-Options"] == "DENY"


def test_the_secret_lets_in_and_its_cookie_is_kept_from_scripts_and_other_sites(
    guarded: tuple[PageProcess, Path, Path]
) -> None:
    process, file, _ = guarded
    port, secret = port_of(process), read_secret(file)
    assert log_in(port, secret, Origin="http://evil.example")[0] == 403
    assert ask(port, "/login", "POST", urlencode({"secret": secret}))[0] == 403  # from no page
    assert log_in(port, secret, Host="evil.example")[0] == 403
    status, headers, _ = log_in(port, secret)
    assert (status, headers["Location"]) == (303, "/")
    cookie, _, attributes = headers["Set-Cookie"].partition(";")
    for word in ("HttpOnly", "SameSite=Strict", "Path=/", "Max-Age="):
        assert word in attributes
    assert secret not in headers["Set-Cookie"]
    status, _, text = ask(port, "/", Cookie=cookie)
    assert status == 200 and cookie.partition("=")[2].strip('"') not in text
    assert ask(port, "/static/js/bokeh.min.js", Cookie=cookie)[0] == 200
    assert "aW4=" in cookie  # base64 of what is signed
    assert ask(port, "/", Cookie=cookie.replace("aW4=", "aW5="))[0] == 303


def test_a_person_logs_in_and_stays_in_over_a_restart(
    guarded: tuple[PageProcess, Path, Path], browser: Browser
) -> None:
    _, file, run = guarded
    process = PageProcess(run, 0, "--page-secret", file)
    try:
        with browser.new_context() as context:
            page = context.new_page()
            page.goto(process.address())
            page.get_by_label("secret").fill("that is a guess <b>")
            page.get_by_role("button").click()
            expect(page.get_by_text("That is not the secret.")).to_be_visible()
            page.get_by_label("secret").fill(read_secret(file))
            page.get_by_role("button").click()
            verdict = page.locator("section.verdict")
            expect(verdict).to_contain_text("20 field points", timeout=60_000)
            port = port_of(process)
            assert process.end() == 0
            process = PageProcess(run, port, "--page-secret", file)
            page.goto(process.address())
            expect(verdict).to_contain_text("20 field points", timeout=60_000)
    finally:
        assert process.end() == 0


def test_wrong_guesses_are_told_to_wait(guarded: tuple[PageProcess, Path, Path]) -> None:
    port = port_of(guarded[0])
    answers = [log_in(port, f"guess {n}")[0] for n in range(MOST_WRONG + 1)]
    assert answers == [403] * MOST_WRONG + [429]
    status, headers, text = log_in(port, read_secret(guarded[1]))
    assert status == 429 and "wait a minute" in text and "Set-Cookie" not in headers
