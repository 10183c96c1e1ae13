"""Progress on a terminal: one line on stderr, rewritten in place; nothing when piped."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager

from vop.progress import Progress, silent

#: Seconds between two drawings of the line.
_INTERVAL_S = 0.1
_WIDTH = 24


@contextmanager
def progress_on_terminal() -> Iterator[Progress]:
    """Yield a progress callback that draws on stderr if that is a terminal."""
    if not sys.stderr.isatty():
        yield silent
        return
    line = _Line()
    try:
        yield line
    finally:
        line.clear()


class _Line:
    def __init__(self) -> None:
        self._label = ""
        self._started = self._drawn = 0.0
        self._shown = False

    def __call__(self, label: str, done: int, total: int) -> None:
        now = time.monotonic()
        if label != self._label:
            self._label, self._started, self._drawn = label, now, 0.0
        if now - self._drawn < _INTERVAL_S and done < total:
            return
        self._drawn = now
        share = min(1.0, done / total) if total > 0 else 0.0
        filled = round(share * _WIDTH)
        left = (now - self._started) * (1 - share) / share if share > 0.02 else None
        remaining = f", about {left:.0f} s left" if left is not None and left > 1 else ""
        sys.stderr.write(
            f"\r\x1b[K{label:<22} {'=' * filled}{' ' * (_WIDTH - filled)}| {100 * share:3.0f} %{remaining}"
        )
        sys.stderr.flush()
        self._shown = True

    def clear(self) -> None:
        """Wipe the line."""
        if self._shown:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()
