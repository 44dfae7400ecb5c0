"""The README's Python example runs as printed."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np


def _readings() -> list[tuple[str, float, float, None]]:
    rng = np.random.default_rng(3)
    rows: list[tuple[str, float, float, None]] = []
    for step in range(400):
        time_s = 0.1 * step
        field = 0.02 * max(0.0, time_s - 5.0)
        lagged = 0.02 * max(0.0, time_s - 5.4)
        noise = 4e-9 * rng.normal(size=2)
        rows.append(("field", time_s, field, None))
        rows.append(("longitudinal", time_s, 4e-9 * (4.0 * 67.0 + noise[0]), None))
        rows.append(("hall", time_s, -4e-9 * (2152.0 * lagged + noise[1]), None))
    return rows


def test_the_python_example_runs_and_prints_estimates(capsys) -> None:
    text = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")
    block = re.search(r"```python\n(.*?)```", text, re.DOTALL)
    assert block is not None
    names: dict[str, object] = {"readings": _readings()}
    exec(compile(block[1], "README.md", "exec"), names)  # noqa: S102
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) > 50
    assert lines[-1].endswith(("converging", "stable"))
