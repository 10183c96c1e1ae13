"""How long-running functions report: a callback that the caller may leave out."""

from __future__ import annotations

from typing import Protocol


class Progress(Protocol):
    """Called as ``progress(label, done, total)``; ``done == total`` ends the step ``label``."""

    def __call__(self, label: str, done: int, total: int) -> None: ...


def silent(label: str, done: int, total: int) -> None:
    """The progress of a caller who does not want to know."""
