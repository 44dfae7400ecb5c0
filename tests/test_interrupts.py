"""Signals become a wish, and the browser is left alone where there is no display."""

from __future__ import annotations

import signal
import threading

import pytest

from dashboard.browser import open_page
from dashboard.interrupts import asked_to_end


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_a_signal_sets_the_wish_and_interrupts_nothing(number: signal.Signals) -> None:
    before = signal.getsignal(number)
    with asked_to_end() as wish:
        assert not wish.is_set()
        signal.raise_signal(number)
        signal.raise_signal(number)
        assert wish.is_set()
    assert signal.getsignal(number) == before


def test_no_browser_without_a_display(monkeypatch: pytest.MonkeyPatch) -> None:
    for name in ("DISPLAY", "WAYLAND_DISPLAY", "BROWSER"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setattr("sys.platform", "linux")
    assert not open_page("http://127.0.0.1:1")


def test_the_browser_is_opened_where_there_is_one(monkeypatch: pytest.MonkeyPatch) -> None:
    opened = threading.Event()
    monkeypatch.setenv("DISPLAY", ":0")
    monkeypatch.setattr("webbrowser.open", lambda address: opened.set())
    assert open_page("http://127.0.0.1:1")
    assert opened.wait(10.0)
