"""Progress as an optional callable, so that loops never ask whether a bar exists."""

from __future__ import annotations

from typing import Protocol

__all__ = ["Progress", "no_progress"]


class Progress(Protocol):
    """Called when a piece of work begins."""

    def __call__(self, done: int, total: int, what: str) -> None:
        """Say that `done` of `total` pieces are finished and `what` begins."""


def no_progress(done: int, total: int, what: str) -> None:
    """Say nothing."""
