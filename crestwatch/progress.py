"""Progress on stderr for anything over a second, only where a person is looking."""

import sys
import time
from types import TracebackType
from typing import Self

PATIENCE = 1.0  # s before a bar appears: what is quicker needs none


class Progress:
    """A bar that appears once the work has lasted; silent in a pipe."""

    def __init__(self, words: str, total: int) -> None:
        self._words = words
        self._total = total
        self._began = time.monotonic()
        self._shown = 0.0
        self._drawn = False
        self._watched = sys.stderr.isatty() and total > 0

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._drawn:
            sys.stderr.write("\r\x1b[K")
            sys.stderr.flush()

    def advance_to(self, done: int) -> None:
        """Tell how much of the total is done."""
        if not self._watched:
            return
        now = time.monotonic()
        if now - self._began < PATIENCE or now - self._shown < 0.1:
            return
        self._shown = now
        share = min(1.0, done / self._total)
        left = (now - self._began) * (1.0 - share) / max(share, 1e-6)
        filled = round(24 * share)
        bar = "#" * filled + "-" * (24 - filled)
        sys.stderr.write(
            f"\r{self._words} [{bar}] {100 * share:3.0f} %, about {left:.0f} s left\x1b[K"
        )
        sys.stderr.flush()
        self._drawn = True
