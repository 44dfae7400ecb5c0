"""What the terminal shows, and that it can go away."""

from __future__ import annotations

import io
from collections.abc import Callable

import pytest
from rich.console import Console

from acquire.bus import StreamHealth
from acquire.config import Rig, parse
from acquire.readings import stream_of
from acquire.tables import Cell
from dashboard.progress import Progress
from dashboard.terminal import LineView, LiveView, line, open_view, printable
from dashboard.view import Moment

CONFIG = b"""
[run]
title = "t"
[field]
reader = "magnet"
value = "B"
[[readers]]
name = "magnet"
resource = "TCPIP::127.0.0.1::1::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["FIELD?"]
fields = 2
values = [{ name = "B", position = 1, unit = "T", scale = 0.001 },
          { name = "R", position = 2, unit = "Ohm" }]
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = { reader = "magnet", x = "R" }
hall = { reader = "magnet", x = "R" }
"""
MOMENT = Moment(12.0, {"reader magnet": "ready", "page": "waiting"}, {"page": 2})


@pytest.fixture
def rig() -> Rig:
    """One reader, one Hall bar; the field in mT."""
    return parse(CONFIG)


@pytest.fixture
def progress(rig: Rig) -> Progress:
    """Some readings of it."""
    progress = Progress("run", rig)

    def take(status: str, detail: str | None = None, *values: Cell) -> None:
        progress.take(stream_of("magnet"), (0, 1.0, 0.01, status, detail, *values))

    take("settings", "{}", None, None)
    take("ok", None, 500.0, 1.0)
    take("ok", None, 510.0, 1.0)
    take("no_answer", "no reply within 1000 ms", None, None)
    return progress


def shown(view_of: Callable[[Console], LineView | LiveView], progress: Progress) -> str:
    """What a view writes."""
    console = Console(file=io.StringIO(), width=200, force_terminal=False)
    with view_of(console) as view:
        view.say("Page: http://127.0.0.1:5410")
        view.show(progress, MOMENT)
    return console.file.getvalue()  # type: ignore[attr-defined]


def test_counts_scales_and_troubles(progress: Progress) -> None:
    assert progress.readings == {"magnet": 2}
    assert progress.unusable == {"magnet": 1}
    assert progress.field_T == pytest.approx(0.510)
    assert progress.trouble == {"magnet": "no_answer: no reply within 1000 ms"}


@pytest.mark.parametrize("kind", [LineView, LiveView])
def test_what_matters_is_there(rig: Rig, progress: Progress, kind: type[LineView]) -> None:
    text = shown(lambda console: kind(rig, console), progress)
    for wanted in (
        "Page: http://127.0.0.1:5410",
        "+0.5100 T",
        "sheet density",
        "mobility",
        "scattering time",
        "not known yet",
        "converging",
        "no reply within 1000 ms",
        "page",
    ):
        assert wanted in text


def test_the_live_view_says_what_was_restarted(rig: Rig, progress: Progress) -> None:
    assert "page (restarted 2 times)" in shown(lambda console: LiveView(rig, console), progress)


def test_a_line_only_every_few_seconds(rig: Rig, progress: Progress) -> None:
    now = [0.0]
    console = Console(file=io.StringIO(), width=200)
    view = LineView(rig, console, lambda: now[0])
    for _ in range(100):
        view.show(progress, MOMENT)
        now[0] += 0.1
    assert console.file.getvalue().count("\n") == 2  # type: ignore[attr-defined]


def test_a_line_at_once_when_a_process_changes(rig: Rig, progress: Progress) -> None:
    now = [0.0]
    console = Console(file=io.StringIO(), width=200)
    view = LineView(rig, console, lambda: now[0])
    view.show(progress, MOMENT)
    now[0] = 1.0
    view.show(progress, Moment(13.0, {"reader magnet": "ready", "page": "ready"}, {"page": 3}))
    assert console.file.getvalue().count("\n") == 2  # type: ignore[attr-defined]


def test_lines_where_there_is_no_terminal(rig: Rig) -> None:
    assert isinstance(open_view(rig, Console(file=io.StringIO())), LineView)
    assert isinstance(open_view(rig, Console(file=io.StringIO(), force_terminal=True)), LiveView)


class Gone(io.StringIO):
    """A terminal that was closed."""

    def write(self, text: str) -> int:
        raise OSError(5, "Input/output error")


@pytest.mark.parametrize("kind", [LineView, LiveView])
def test_a_closed_terminal_stops_nothing(
    rig: Rig, progress: Progress, kind: type[LineView]
) -> None:
    with kind(rig, Console(file=Gone(), force_terminal=kind is LiveView)) as view:
        view.say("hello")
        view.show(progress, MOMENT)


def test_control_characters_do_nothing() -> None:
    assert printable("a\x1b[2Jb\nc\x07") == "a\\x1b[2Jb\nc\\x07"
    assert printable("µ ± ●") == "µ ± ●"


def test_who_cannot_record_is_shown_until_it_can() -> None:
    progress = Progress("run", parse(CONFIG))
    good, bad = StreamHealth(3, 1.0, 0, 0), StreamHealth(3, 1.0, 0, 0, 0, "disk full")
    assert progress.hear({"events": good}) == ([], [])
    assert progress.hear({"events": good, "readings/magnet": bad}) == (["readings/magnet"], [])
    assert "readings/magnet: cannot record: disk full" in line(progress, MOMENT)
    assert progress.hear({"events": good, "readings/magnet": good}) == ([], ["readings/magnet"])
    assert "cannot record" not in line(progress, MOMENT)
