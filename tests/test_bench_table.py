"""The bench's own judgement: what counts as kept, and the command around it."""

from __future__ import annotations

import math

import pytest
from bench import run as command
from bench import table
from bench.naive import RULES, Stop
from bench.oracle import Reference
from bench.scenarios import make
from bench.store import Store
from bench.trial import NUMBERS, Kept, Outcome, run

FAIR = Reference(0.1, 0.2, 0.05, 0.0, 0.1, 1e-4, 1e-4)


def _outcome(index: int = 0, **more: object) -> Outcome:
    facts = {"covered": True, "always": True, "forbidden": False, "required": (), "allowed": (),
             "clean": True}
    facts.update((key, more.pop(key)) for key in list(more) if key in facts)
    kept = {
        name: Kept(points=10, held=10, held_at_stop=True, error_at_stop=0.001, held_at_end=True)
        for name in NUMBERS
    }
    out = Outcome("made_up", index, **facts, kept=kept, reference=FAIR, stop_T=0.25,
                  naive={rule: Stop(0.1, True) for rule in RULES})
    for key, value in more.items():
        setattr(out, key, value)
    return out


def _many(good: int, **bad: object) -> list[Outcome]:
    return [_outcome(k) for k in range(good)] + [_outcome(k, **bad) for k in range(good, 100)]


def test_clean_ramps_keep_every_bar():
    assert table.failings(_many(100)) == []


def test_a_share_may_miss_its_bar_by_two_monte_carlo_errors():
    assert table.at_least(91, 100, 0.95) and not table.at_least(90, 100, 0.95)
    assert table.at_most(2, 100, 0.01) and not table.at_most(3, 100, 0.01)
    assert table.share(0, 0) == "-"
    assert table.share(500, 500) == "100.0 ± 0.3"


@pytest.mark.parametrize(
    ("bad", "missed"),
    [
        ({"kept": {name: Kept(10, 10) for name in NUMBERS}}, "coverage at stopping"),
        ({"kept": {name: Kept(10, 9, True) for name in NUMBERS}}, "coverage at every point"),
        ({"cautions": {"drift": 0.1}}, "false cautions"),
        ({"failure": "ValueError: no"}, "the estimator broke"),
    ],
)
def test_each_bar_is_missed_for_its_own_reason(bad, missed):
    assert table.failings(_many(85, **bad)) == [missed]


def test_late_stops_loss_of_efficiency_silence_and_false_rest_are_missed():
    late = [_outcome(k, stop_T=0.33) for k in range(10)]
    assert table.failings(late) == ["stops late"]
    poor = [_outcome(k, excess=(0.01, 0.06)) for k in range(10)]
    assert table.failings(poor) == ["efficiency"]
    wrong = [_outcome(k, covered=False, forbidden=True, required=("drift",)) for k in range(10)]
    assert table.failings(wrong) == ["called stable", "caution not shown"]
    right = [
        _outcome(k, covered=False, forbidden=True, required=("drift",), stop_T=math.inf,
                 cautions={"drift": 0.1, "heating": 0.2})
        for k in range(10)
    ]
    assert table.failings(right) == []


def test_rows_fit_their_headers():
    ramps = _many(99, cautions={"drift": 0.1})
    assert len(table.promises(ramps)) == len(table.PROMISES)
    assert len(table.comparisons(ramps)) == len(table.COMPARISONS)
    text = table.markdown(table.PROMISES, [table.promises(ramps)])
    assert len({len(line) for line in text.splitlines()}) == 1
    assert any("drift" in note for note in table.notes(ramps))


def test_a_ramp_through_the_estimator_gives_an_outcome():
    out = run(make("textbook", 1))
    assert out.failure is None
    assert out.estimates > 100
    assert all(kept.points > 0 for kept in out.kept.values())
    assert out.reference is not None and set(out.naive) == set(RULES)


def test_a_ramp_that_breaks_the_estimator_is_an_outcome(monkeypatch):
    def broken(case):
        raise ValueError("no")

    monkeypatch.setattr("bench.trial.build", broken)
    assert run(make("textbook", 1)).failure == "ValueError: no"


def test_outcomes_are_kept_until_the_code_changes(tmp_path, monkeypatch):
    store = Store(tmp_path)
    ramps = [_outcome(k) for k in range(3)]
    assert store.load("made_up", 3) == []
    store.save("made_up", ramps)
    assert repr(store.load("made_up", 2)) == repr(ramps[:2])
    assert repr(store.load("made_up", 4)) == repr(ramps)
    monkeypatch.setattr("bench.store.code_digest", lambda: "other code")
    assert Store(tmp_path).load("made_up", 3) == []


def test_the_command_makes_a_table_and_takes_kept_outcomes(tmp_path, monkeypatch, capsys):
    monkeypatch.setattr(command, "one", lambda job: _outcome(job[1]))
    monkeypatch.setattr(command, "names", lambda: ["made_up"])
    arguments = ["--ramps", "4", "--jobs", "1", "--keep", str(tmp_path / "kept"),
                 "--markdown", str(tmp_path / "table.md")]
    assert command.main(arguments) == 0
    assert "| made_up" in capsys.readouterr().out
    assert "What was promised" in (tmp_path / "table.md").read_text(encoding="utf-8")
    monkeypatch.setattr(command, "one", None)
    assert command.main(arguments) == 0


def test_the_command_names_the_scenarios_and_refuses_others(capsys):
    assert command.main(["--list"]) == 0
    assert "textbook" in capsys.readouterr().out.split()
    assert command.main(["--scenario", "textbok"]) == 2
    assert "textbok" in capsys.readouterr().err
