"""Progress on stderr for anything over a second, only where a person is looking."""

import sys
import time
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from rich.progress import Progress as Bar
    from rich.progress import TaskID

PATIENCE = 1.0  # s before a bar appears: what is quicker needs none


class Progress:
    """A bar that appears once the work has lasted; silent in a pipe."""

    def __init__(self, words: str, total: int, wanted: bool = True) -> None:
        """Progress of `words` up to `total`, in whatever it is counted."""
        self._words = words
        self._total = total
        self._began = time.monotonic()
        self._bar: Bar | None = None
        self._task: TaskID | None = None
        self._watched = wanted and sys.stderr.isatty() and total > 0

    def advance_to(self, done: int) -> None:
        """Tell how much of the total is done."""
        if not self._watched:
            return
        if self._bar is None:
            if time.monotonic() - self._began < PATIENCE:
                return
            self._begin()
        if self._bar is not None and self._task is not None:
            self._bar.update(self._task, completed=done)

    def close(self) -> None:
        """Take the bar away."""
        if self._bar is not None:
            self._bar.stop()

    def _begin(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, TaskProgressColumn, TextColumn, TimeRemainingColumn
        from rich.progress import Progress as Bar

        self._bar = Bar(
            TextColumn("{task.description}"),
            BarColumn(),
            TaskProgressColumn(),
            TextColumn("left"),
            TimeRemainingColumn(),
            console=Console(stderr=True),
            transient=True,
            # Results go where they were going; the bar owns no stream but its own.
            redirect_stdout=False,
            redirect_stderr=False,
        )
        self._bar.start()
        self._task = self._bar.add_task(self._words, total=self._total)
