"""Who is let in, by refusal: a real server on the loopback address, asked by plain sockets."""

from __future__ import annotations

import base64
import http.client
import json
import re
import socket
from collections.abc import Iterator
from pathlib import Path

import psutil
import pytest
from made_run import MadeRun, PageProcess, estimates, ramp

from dashboard.page.__main__ import main
from dashboard.page.door import Door


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    made = MadeRun(tmp_path_factory.mktemp("runs"), live=False)
    made.estimate(*estimates(ramp(1.0, 20)))
    made.end()
    return made.path


@pytest.fixture(scope="module")
def page(run: Path) -> Iterator[PageProcess]:
    process = PageProcess(run)
    yield process
    assert process.end() == 0


@pytest.fixture(scope="module")
def port(page: PageProcess) -> int:
    return int(page.address().rstrip("/").rpartition(":")[2])


def get(port: int, path: str = "/", **headers: str) -> tuple[int, dict[str, str], str]:
    """Status, headers and text of what a path answers; ``_`` in a header stands for ``-``."""
    line = http.client.HTTPConnection("127.0.0.1", port, timeout=20)
    try:
        given = {name.replace("_", "-"): value for name, value in headers.items()}
        line.request("GET", path, headers=given)
        reply = line.getresponse()
        return reply.status, dict(reply.headers), reply.read().decode(errors="replace")
    finally:
        line.close()


def knock(port: int, **headers: str) -> int:
    """The status with which the websocket answers."""
    upgrade = {
        "Connection": "Upgrade",
        "Upgrade": "websocket",
        "Sec_WebSocket_Version": "13",
        "Sec_WebSocket_Key": base64.b64encode(b"0123456789abcdef").decode(),
        "Sec_WebSocket_Protocol": "bokeh, token",
    }
    with socket.create_connection(("127.0.0.1", port), timeout=20) as line:
        fields = {"Host": f"127.0.0.1:{port}", **upgrade, **headers}
        lines = [f"{name.replace('_', '-')}: {value}" for name, value in fields.items()]
        line.sendall(("GET /ws HTTP/1.1\r\n" + "\r\n".join(lines) + "\r\n\r\n").encode())
        return int(line.recv(100).split()[1])


def test_the_page_is_served_to_its_own_names_only(port: int) -> None:
    assert get(port)[0] == 200
    assert get(port, Host=f"localhost:{port}")[0] == 200
    for host in (
        "evil.example",
        f"evil.example:{port}",
        f"127.0.0.1.evil.example:{port}",
        "127.0.0.1",
    ):
        status, _, text = get(port, Host=host)
        assert (status, "only" in text) == (403, True), host


def test_a_websocket_must_come_from_the_page_itself(port: int) -> None:
    assert knock(port) == 403  # no Origin at all: a program, not a page
    for origin in (
        "http://evil.example",
        f"http://evil.example:{port}",
        f"http://127.0.0.1:{port}.evil.example",
        f"http://127.0.0.1.evil.example:{port}",
        f"https://127.0.0.1:{port}",
        "null",
    ):
        assert knock(port, Origin=origin) == 403, origin
    assert knock(port, Origin=f"http://127.0.0.1:{port}", Host="evil.example") == 403
    assert knock(port, Origin=f"http://127.0.0.1:{port}") == 101
    assert knock(port, Origin=f"http://localhost:{port}") == 101


@pytest.mark.parametrize("path", ["/autoload.js", "/metadata", "/ws/", "/x", "/../etc/passwd"])
def test_there_is_nothing_but_the_page(port: int, path: str) -> None:
    assert get(port, path)[0] == 404


def test_static_files_are_not_a_way_out_of_their_folder(port: int) -> None:
    assert get(port, "/static/js/bokeh.min.js")[0] == 200
    for path in ("/static/../server.py", "/static/%2e%2e/server.py", "/static/js/..%2f..%2fx"):
        assert get(port, path)[0] in (403, 404), path


def test_a_session_id_that_somebody_made_up_is_refused(port: int) -> None:
    assert get(port, "/?bokeh-session-id=guessed")[0] == 403
    assert get(port, "/", Bokeh_Session_Id="guessed")[0] == 403


def test_the_token_holds_nothing_of_what_the_browser_sent(port: int) -> None:
    _, _, text = get(port, Cookie="a=TOPSECRET", Authorization="Bearer TOPSECRET")
    token = re.search(r'"token":"([\w.=-]+)"', text)
    assert token is not None
    session, _, _ = token[1].partition(".")
    payload = base64.urlsafe_b64decode(session + "=" * (-len(session) % 4))
    told = json.loads(payload)
    assert "TOPSECRET" not in text and b"TOPSECRET" not in payload
    assert set(told) >= {"session_id", "session_expiry"}


def test_the_browser_is_told_to_ask_nobody_else(port: int) -> None:
    _, headers, text = get(port)
    policy = headers["Content-Security-Policy"]
    assert "default-src 'none'" in policy
    assert f"connect-src 'self' ws://127.0.0.1:{port};" in policy
    assert "frame-ancestors 'none'" in policy and "form-action 'self'" in policy
    scripts = re.search(r"script-src ([^;]*);", policy)
    assert scripts is not None and "unsafe" not in scripts[1]
    nonce = re.search(r"'nonce-([\w-]{20,})'", scripts[1])
    assert nonce is not None and nonce[1] not in get(port)[1]["Content-Security-Policy"]
    assert set(re.findall(r"<script[^>]*nonce=\"([\w-]+)\"", text)) == {nonce[1]}
    assert text.count("<script") == text.count(f'<script nonce="{nonce[1]}"')
    assert not re.search(r"(?:src|href)=\"(?:https?:)?//", text)


@pytest.mark.parametrize(
    "path", ["/", "/static/js/bokeh.min.js", "/favicon.ico", "/x", "/static/no-such-file", "/ws"]
)
def test_every_answer_keeps_the_browser_from_more_than_it_is_meant_to_do(
    port: int, path: str
) -> None:
    headers = get(port, path)[1]
    assert headers["X-Content-Type-Options"] == "nosniff"
    assert headers["X-Frame-Options"] == "DENY"
    assert headers["Referrer-Policy"] == "same-origin"
    assert headers["Cross-Origin-Resource-Policy"] == "same-origin"
    assert "default-src 'none'" in headers["Content-Security-Policy"]
    assert "ornado" not in headers["Server"]
    if not path.startswith("/static/"):
        assert headers["Cache-Control"] == "no-store"


def test_another_site_may_not_ask_even_for_what_is_public(port: int) -> None:
    assert get(port, "/", Origin="http://evil.example")[0] == 403
    assert get(port, "/static/js/bokeh.min.js", Origin="null")[0] == 403
    assert get(port, "/login")[0] == 404  # there is no secret here


def test_only_the_loopback_address_is_listened_to(page: PageProcess, port: int) -> None:
    lines = psutil.Process(page.process.pid).net_connections()
    listening = {line.laddr for line in lines if line.status == psutil.CONN_LISTEN}
    assert listening == {("127.0.0.1", port)}


def test_there_is_a_limit_to_open_pages(run: Path) -> None:
    process = PageProcess(run, 0, "--most-pages", 2)
    port = int(process.address().rstrip("/").rpartition(":")[2])
    assert [get(port)[0] for _ in range(4)] == [200, 200, 503, 503]
    assert "2 pages are open already" in get(port)[2]
    assert process.end() == 0


def test_the_door_decides_without_a_server() -> None:
    door = Door(5410, most_pages=3)
    assert door.refusal("/", "LOCALHOST:5410", None, 2) is None
    assert door.refusal("/static/x", "127.0.0.1:5410", None, 3) is None
    assert door.refusal("/", "127.0.0.1:5411", None, 0) is not None
    assert door.refusal("/ws", "127.0.0.1:5410", "http://127.0.0.1:5410", 5) is None
    assert door.refusal("/ws", "127.0.0.1:5410", "http://127.0.0.1:5410", 6) is not None
    named = Door(80, names=("rig.example", "[::1]"))
    assert named.origins == {f"http://{host}" for host in named.hosts}
    assert set(named.hosts) == {"rig.example:80", "rig.example", "[::1]:80", "[::1]"}
    assert named.refusal("/", "127.0.0.1", None, 0) is not None


def test_what_can_not_be_served_is_told_in_one_sentence_with_a_next_step(
    run: Path, port: int, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main([str(run), "--port", str(port)]) == 1
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.startswith(f"page: Port {port} is taken") and "--port N" in told.err
    assert told.err.count("\n") == 1
    assert main([str(tmp_path)]) == 1
    told = capsys.readouterr()
    assert told.err.startswith("page: ") and "is not a run" in told.err
    assert told.err.count("\n") == 1


def test_the_page_ends_when_its_parent_is_another_one(run: Path) -> None:
    process = PageProcess(run, 0, "--parent", 1)  # as after the supervisor's death
    assert process.wait() == 0
    assert process.errors == [""]
