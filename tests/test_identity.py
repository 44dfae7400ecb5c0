from __future__ import annotations

import pytest

from acquire.config.reader import Identity
from acquire.identity import identity_problem

ANY = Identity()
MODEL = Identity(pattern=r"MODEL,\d+")


def test_an_answer_that_matches_proves_itself() -> None:
    assert identity_problem(MODEL, "MAKER,MODEL,7,1.0") is None
    assert identity_problem(MODEL, "MAKER,MODEL,7,1.0", known="MAKER,MODEL,7,1.0") is None
    assert identity_problem(ANY, "anything") is None


@pytest.mark.parametrize("answer", ["", "  ", "*IDN?", " *IDN? ", "M" * 300])
def test_nothing_an_echo_and_a_flood_prove_nothing(answer: str) -> None:
    assert "proves nothing" in str(identity_problem(ANY, answer))


def test_the_pattern_is_searched_for() -> None:
    assert "does not match" in str(identity_problem(MODEL, "MAKER,MODEL,x"))


def test_another_one_of_the_same_kind_is_named_beside_the_known_one() -> None:
    told = str(identity_problem(MODEL, "MODEL,7", known="MODEL,8"))
    assert "'MODEL,7'" in told
    assert "'MODEL,8'" in told
