import re
import time
from datetime import datetime, timedelta, timezone

from acquire.clock import RunClock, utc_now_text, utc_text


def test_a_run_clock_counts_from_the_start():
    assert RunClock(100.0, lambda: 102.5).now_s() == 2.5


def test_a_run_clock_runs_on_the_monotonic_clock():
    start = time.monotonic()
    now = RunClock(start).now_s()
    assert 0 <= now <= time.monotonic() - start


def test_utc_has_microseconds_also_when_they_are_0():
    moment = datetime(2031, 5, 14, 12, 15, 2, tzinfo=timezone(timedelta(hours=2)))
    assert utc_text(moment) == "2031-05-14T10:15:02.000000Z"


def test_the_wall_clock_is_told_in_utc():
    text = utc_now_text()
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}Z", text)
    assert abs(datetime.fromisoformat(text).timestamp() - time.time()) < 60
