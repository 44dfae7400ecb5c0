"""The page's colours: one place for style sheets and plots.

Blue, burnt orange, teal and indigo stay apart for all common kinds of colour blindness, and no
state is told by colour alone: each has a shape and a word.
"""

from __future__ import annotations

PAPER = "#f4f4f1"
CARD = "#ffffff"
LINE = "#dcddd7"
GRID = "#ecece7"
INK = "#1b2227"
SOFT = "#59636a"
LONGITUDINAL = "#0b62a4"
HALL = "#b3490f"
NUMBER = "#4a4a9c"
TARGET = "#0f766e"
WINDOW = "#6f8794"
GOOD = "#0f766e"
GOOD_TINT = "#e3f3f0"
WARNING = "#8a5200"
WARNING_TINT = "#fff1cf"
ALARM = "#a11d1a"
ALARM_TINT = "#fde7e4"
QUIET_TINT = "#edf0f5"

VARIABLES = "".join(
    f"--{name.lower().replace('_', '-')}:{value};"
    for name, value in dict(globals()).items()
    if name.isupper() and isinstance(value, str)
)
"""The same for style sheets: ``--good-tint`` and so on."""
