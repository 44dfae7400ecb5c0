"""The codes of the cautions: those that the README lists, and no others."""

from __future__ import annotations

import re
from pathlib import Path

ROOT = Path(__file__).parent.parent


def test_readme_lists_every_code() -> None:
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    part = readme.split("## Cautions", 1)[1].split("\n## ", 1)[0]
    listed = set(re.findall(r"^\| `(\w+)` \|", part, re.MULTILINE))
    used = set()
    for path in (ROOT / "analyse" / "cautions").glob("*.py"):
        used |= set(re.findall(r'Caution\(\s*"(\w+)"', path.read_text(encoding="utf-8")))
    assert listed == used
