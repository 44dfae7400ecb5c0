"""Keeps the processes of a run alive, and ends them in order.

A process that dies is started again after a pause that grows (:class:`~dashboard.pauses.Pauses`),
for as long as it takes, and the others are left to their work. One that is not ready in time
counts as dead. Whoever owns a :class:`Supervisor` calls :meth:`~Supervisor.poll` a few times a
second; nothing here waits, except for the end.
"""

from __future__ import annotations

import signal
import time
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from typing import Literal

from dashboard.child import Child
from dashboard.pauses import Pauses

State = Literal["not started", "starting", "ready", "waiting", "ended"]
Happening = Literal["ready", "died", "not_ready", "hung", "back"]


@dataclass(frozen=True)
class Role:
    """One process of a run.

    ``ready(since)`` says, without waiting, whether the process that was started at ``since``
    (seconds of the supervisor's clock) does its work.
    """

    name: str
    command: tuple[str, ...]
    ready: Callable[[float], bool]
    ready_within_s: float = 30.0


@dataclass(frozen=True)
class ProcessNews:
    """Something that happened to a process, with the sentence for it.

    ``last_words`` is the last line that it wrote before it died, which ``hear`` has had already.
    """

    role: str
    happening: Happening
    text: str
    last_words: str = ""

    @property
    def in_full(self) -> str:
        """The sentence with the last words."""
        return f"{self.text} (it said: {self.last_words})" if self.last_words else self.text


@dataclass
class _Post:
    """A role and whoever holds it at the moment."""

    role: Role
    pauses: Pauses
    state: State = "not started"
    child: Child | None = None
    started_s: float = 0.0
    again_s: float = 0.0
    restarts: int = 0


@dataclass
class Supervisor:
    """Processes by role. ``tell`` hears what happens to them, ``hear`` each line they write."""

    roles: Sequence[Role]
    tell: Callable[[ProcessNews], None]
    hear: Callable[[str, str], None] = lambda role, line: None
    clock: Callable[[], float] = time.monotonic
    pauses: Callable[[], Pauses] = Pauses
    _posts: dict[str, _Post] = field(init=False)

    def __post_init__(self) -> None:
        self._posts = {role.name: _Post(role, self.pauses()) for role in self.roles}

    @property
    def names(self) -> tuple[str, ...]:
        """All roles."""
        return tuple(self._posts)

    def start(self, names: Iterable[str] | None = None) -> None:
        """Start these roles, all by default."""
        for name in self._posts if names is None else names:
            self._start(self._posts[name])

    def poll(self) -> None:
        """Notice who died, who is ready and whose pause is over."""
        now = self.clock()
        for post in self._posts.values():
            if post.state in ("starting", "ready"):
                self._look_at(post, now)
            elif post.state == "waiting" and now >= post.again_s:
                post.restarts += 1
                self._start(post)

    def state(self, name: str) -> State:
        """What this role is doing."""
        return self._posts[name].state

    def pid(self, name: str) -> int | None:
        """The process that holds this role now."""
        child = self._posts[name].child
        return None if child is None else child.pid

    @property
    def restarts(self) -> dict[str, int]:
        """How often each role was started again; roles that never were are left out."""
        return {name: post.restarts for name, post in self._posts.items() if post.restarts}

    def replace(self, name: str, why: str) -> None:
        """Kill a process that lives but does not work; it is started again as if it had died."""
        post = self._posts[name]
        if post.child is not None and post.state in ("starting", "ready"):
            post.child.kill()
            self._died(post, "hung", why)

    def ask_to_end(self, names: Iterable[str]) -> None:
        """Ask these roles to end, and don't wait for it; :meth:`stop` does."""
        for name in names:
            if (child := self._posts[name].child) is not None:
                child.terminate()

    def stop(self, names: Iterable[str], within_s: float) -> tuple[str, ...]:
        """End these roles: asked first, killed after ``within_s``. Returns who had to be killed."""
        posts = [self._posts[name] for name in names]
        self.ask_to_end(post.role.name for post in posts)
        deadline = time.monotonic() + within_s
        killed = []
        for post in posts:
            if post.child is not None and not post.child.wait(deadline - time.monotonic()):
                killed.append(post.role.name)
                post.child.kill()
            self._end(post)
        return tuple(killed)

    def close(self) -> None:
        """Kill whatever still lives. Can be called at any time, more than once."""
        for post in self._posts.values():
            if post.child is not None:
                post.child.kill()
            self._end(post)

    def _start(self, post: _Post) -> None:
        name = post.role.name
        post.started_s = self.clock()
        try:
            post.child = Child(post.role.command, lambda line: self.hear(name, line))
        except OSError as error:  # no memory, too many processes: may pass
            self._died(post, "died", f"could not be started ({error.strerror})")
        else:
            post.state = "starting"

    def _look_at(self, post: _Post, now: float) -> None:
        assert post.child is not None
        if (status := post.child.status) is not None:
            self._died(post, "died", _manner(status), post.child.last_words())
        elif post.state == "starting" and post.role.ready(post.started_s):
            post.state = "ready"
            again = f" again, {now - post.started_s:.1f} s after its start" if post.restarts else ""
            self._tell(post, "back" if post.restarts else "ready", f"works{again}")
        elif post.state == "starting" and now - post.started_s > post.role.ready_within_s:
            post.child.kill()
            self._died(post, "not_ready", f"was not ready within {post.role.ready_within_s:g} s")

    def _died(
        self, post: _Post, happening: Happening, manner: str, last_words: str = ""
    ) -> None:
        now = self.clock()
        pause_s = post.pauses.after(now - post.started_s)
        self._end(post)
        post.state, post.again_s = "waiting", now + pause_s
        text = f"{manner}; it is started again in {pause_s:g} s"
        self._tell(post, happening, text, last_words)

    def _end(self, post: _Post) -> None:
        if post.child is not None:
            post.child.close()
            post.child = None
        post.state = "ended"

    def _tell(
        self, post: _Post, happening: Happening, text: str, last_words: str = ""
    ) -> None:
        name = post.role.name
        self.tell(ProcessNews(name, happening, f"{name} {text}", last_words))


def _manner(status: int) -> str:
    if status < 0:
        return f"was killed by signal {-status} ({signal.strsignal(-status) or 'unnamed'})"
    return f"ended with status {status}"
