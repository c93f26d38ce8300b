"""What everything that is being written has in common: how it ends."""

from abc import ABC, abstractmethod
from types import TracebackType
from typing import Self


class Outlet(ABC):
    """Something that is written in parts and ends in one of two ways.

    As a context manager it closes, or abandons when an exception passes through.
    """

    @abstractmethod
    def close(self) -> None:
        """Finish what was begun."""

    @abstractmethod
    def abandon(self) -> None:
        """Give up and leave nothing behind of what was begun. Nothing happens after ``close``."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        if kind is None:
            self.close()
        else:
            self.abandon()
