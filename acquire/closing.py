"""What is to be closed: a with statement does it."""

from __future__ import annotations

from abc import ABC, abstractmethod
from types import TracebackType
from typing import Self


class Closing(ABC):
    """Gives a class that has a :meth:`close` the with statement, which closes at its end."""

    @abstractmethod
    def close(self) -> None:
        """Give back what is held."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()
