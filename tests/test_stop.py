from __future__ import annotations

import pytest

from acquire.stop import Stop, Stopped


def test_a_wait_gives_what_its_call_gives() -> None:
    assert Stop().wait(divmod, 7, 2) == (3, 1)


def test_a_stop_in_a_wait_breaks_it_off() -> None:
    stop = Stop()
    with pytest.raises(Stopped):
        stop.wait(stop.handle)
    assert stop.requested


def test_a_stop_outside_of_a_wait_lets_everything_finish_and_no_wait_begin() -> None:
    stop = Stop()
    stop.handle()
    called: list[int] = []
    with pytest.raises(Stopped):
        stop.wait(called.append, 1)
    assert called == []


def test_a_wait_that_failed_is_over() -> None:
    stop = Stop()
    with pytest.raises(ZeroDivisionError):
        stop.wait(divmod, 1, 0)
    stop.handle()  # does not raise


def test_no_handler_of_errors_takes_a_stop_for_one() -> None:
    assert not issubclass(Stopped, Exception)
