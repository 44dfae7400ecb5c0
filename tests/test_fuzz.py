"""A quick cut of the fuzzer; ``python tests/bench/fuzz.py`` sends a million messages."""

from __future__ import annotations

from pathlib import Path

import pytest
from bench.fuzz import Fuzz, fuzz


@pytest.mark.parametrize("seed", [1, 2])
def test_malformed_messages_stop_nothing_and_change_no_number(tmp_path: Path, seed: int) -> None:
    report = fuzz(20_000, seed, tmp_path)
    assert report.messages >= 20_000
    assert report.refused > 10_000
    assert report.rows == report.replies > 10


def test_the_same_seed_makes_the_same_messages() -> None:
    made = [[one.message() for _ in range(500)] for one in (Fuzz(7), Fuzz(7), Fuzz(8))]
    assert made[0] == made[1] != made[2]
