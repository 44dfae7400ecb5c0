"""What a person is told of the clocks of two computers."""

from __future__ import annotations

from collections.abc import Callable

from acquire.config import Rig
from acquire.config.hall_bar import HallBarSection
from acquire.config.reader import ReaderSection
from acquire.relay.clocks import DRIFT, Difference

SHARE_OF_DELAY = 0.1  # of the shortest filter delay: so much may a time be wrong without a word
WALL_CLOCKS_S = 1.0  # by which wall clocks may differ without a word; nothing depends on them


def tolerable_s(rig: Rig, reader: ReaderSection) -> float:
    """By how much times may be wrong, in seconds: a tenth of the shortest delay of a lock-in's
    filter that is known beforehand, else of the reader's period."""
    delays = [delay_s for bar in rig.hall_bars for delay_s in _delays(bar)]
    return SHARE_OF_DELAY * min(delays, default=reader.period_s)


def _delays(bar: HallBarSection) -> list[float]:
    filters = [bar.longitudinal.filter, bar.hall.filter]
    return [
        one.time_constant_s * (one.poles or 1)
        for one in filters
        if one is not None and one.time_constant_s is not None
    ]


class ClockWords:
    """Decides what is worth saying, once as long as it lasts. ``complain`` takes a sentence."""

    def __init__(self, tolerable: float, complain: Callable[[str], None]) -> None:
        self._tolerable_s = tolerable
        self._complain = complain
        self._uncertain = False
        self._last: tuple[float, Difference] | None = None

    def met(self, wall_clocks_s: float) -> None:
        """A run there was met whose wall clock is so far ahead of ours."""
        self._last = None
        if abs(wall_clocks_s) > WALL_CLOCKS_S:
            self._complain(
                f"its wall clock is {abs(wall_clocks_s):.3g} s "
                f"{'ahead of' if wall_clocks_s > 0 else 'behind'} ours; times are corrected in this "
                "run, and not in its own folder. Set both clocks by a time server."
            )

    def compared(self, now_s: float, found: Difference) -> None:
        """The clocks were compared."""
        self._heed_uncertainty(found.uncertainty_s)
        if self._last is not None:
            since_s, before = now_s - self._last[0], self._last[1]
            moved_s = found.offset_s - before.offset_s
            allowed_s = before.uncertainty_s + found.uncertainty_s + DRIFT * since_s
            if abs(moved_s) > max(allowed_s, self._tolerable_s):
                self._complain(
                    f"its clock has moved by {moved_s:.3g} s against ours within {since_s:.3g} s, as "
                    "when a computer was suspended; readings from in between have wrong times."
                )
        self._last = now_s, found

    def _heed_uncertainty(self, uncertainty_s: float) -> None:
        if uncertainty_s > self._tolerable_s and not self._uncertain:
            self._uncertain = True
            self._complain(
                f"its clock is known to within {uncertainty_s:.2g} s only, which is much beside the "
                f"filters' delay (good would be {self._tolerable_s:.2g} s): the line to it is slow; "
                "use a quicker one, or ramp so slowly that the field moves little in this time."
            )
        elif uncertainty_s < self._tolerable_s / 2 and self._uncertain:
            self._uncertain = False
            self._complain(f"its clock is known to within {uncertainty_s:.2g} s again")
