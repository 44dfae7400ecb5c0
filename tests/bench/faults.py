"""What goes wrong with readings on their way: done to the streams of a simulated ramp, in place."""

from __future__ import annotations

import numpy as np

from bench.generator import Streams
from bench.rc_stages import Array, RCStages


def between(streams: Streams, channel: str, start_s: float, end_s: float) -> Array:
    """Indices of a channel's readings in a stretch of time."""
    times = streams[channel].time_s
    return np.flatnonzero((times >= start_s) & (times < end_s))


def overload(streams: Streams, channel: str, start_s: float, end_s: float) -> None:
    """The instrument says that it is overloaded."""
    streams[channel].spoil(between(streams, channel, start_s, end_s), "overload")


def clip(streams: Streams, channel: str, from_s: float) -> None:
    """From a moment on the reading can't rise above what it then is, and nothing says so."""
    stream = streams[channel]
    later = np.flatnonzero(stream.time_s >= from_s)
    limit = abs(stream.x[later[0]])
    stream.x[later] = np.clip(stream.x[later], -limit, limit)


def wild_points(streams: Streams, channel: str, share: float, rng: np.random.Generator) -> None:
    """Each reading is with this chance off by many times what neighbours differ by."""
    stream = streams[channel]
    hit = np.flatnonzero(rng.random(len(stream.x)) < share)
    usual = float(np.median(np.abs(np.diff(stream.x)))) + 1e-12 * float(np.ptp(stream.x))
    sizes = usual * 10.0 ** rng.uniform(1.7, 4.0, len(hit))
    stream.x[hit] += sizes * rng.choice((-1.0, 1.0), len(hit))


def range_glitch(
    streams: Streams, channel: str, at_s: float, stages: RCStages, rng: np.random.Generator
) -> None:
    """A change of range: one or two readings are nonsense; one time in three a rest of it of some
    per cent dies away through the filter."""
    stream = streams[channel]
    first = int(np.searchsorted(stream.time_s, at_s))
    last = min(first + int(rng.integers(1, 3)), len(stream.x))
    size = float(np.abs(stream.x).max())
    if rng.random() < 1 / 3:
        since = stream.time_s[first:] - stream.time_s[first]
        stream.x[first:] += size * rng.uniform(-0.05, 0.05) * (1.0 - stages.step(since))
    stream.x[first:last] = size * rng.choice((-1.0, 1.0)) * rng.uniform(2.0, 50.0)


def exchange(streams: Streams) -> None:
    """The two voltage leads are exchanged."""
    streams["hall"], streams["longitudinal"] = streams["longitudinal"], streams["hall"]


def stuck_field(streams: Streams, from_s: float) -> None:
    """The field reading stays at a value while the field goes on."""
    stream = streams["field"]
    later = np.flatnonzero(stream.time_s >= from_s)
    stream.x[later] = stream.x[later[0]]


def silence(streams: Streams, channel: str, from_s: float) -> None:
    """The instrument does not answer any more; its reader says so each time."""
    streams[channel].spoil(between(streams, channel, from_s, np.inf), "no_answer")


def lose(streams: Streams, share: float, rng: np.random.Generator) -> None:
    """Now and then an answer is lost, on every channel; the first two of each are kept."""
    for stream in streams.values():
        hit = np.flatnonzero(rng.random(len(stream.x)) < share)
        stream.spoil(hit[hit > 1], "no_answer")
