"""The app: polls the latest Snapshot, draws the chosen page, answers keys.

Nothing calls into it from another thread and it waits for nobody: a stalled terminal costs no
sample, because nothing behind it knows that there is a terminal.
"""

from collections.abc import Callable, Sequence
from typing import ClassVar

from textual.app import App, ComposeResult
from textual.binding import Binding, BindingType

from shift.snapshot import Snapshot
from tui.lines import Line
from tui.lines import ascii_only as lines_in_ascii
from tui.palette import palette
from tui.screens import now, papers, wave
from tui.screens.page import View
from tui.settings import Settings
from tui.widgets.canvas import Canvas

POLL = 0.1  # s: ten looks a second

# A page is a function of (snapshot, view, width, height); its key stands in BINDINGS.
PAGES: dict[str, Callable[[Snapshot, View, int, int], list[Line]]] = {
    "now": now.draw,
    "wave": wave.draw,
}


class CrestwatchApp(App[None]):
    """The live screen."""

    ENABLE_COMMAND_PALETTE = False
    TITLE = "crestwatch"
    CSS = "Screen { overflow: hidden; }"
    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("1", "page('now')", "Now: is the circuit all right"),
        Binding("2", "page('wave')", "Wave: what does it look like"),
        Binding("left", "channel(-1)", "the channel before (Wave)", key_display="←"),
        Binding("right", "channel(1)", "the next channel (Wave)", key_display="→"),
        Binding("up", "scroll(-1)", "earlier channels (Now)", key_display="↑"),
        Binding("down", "scroll(1)", "later channels (Now)", key_display="↓"),
        Binding("plus,equals_sign", "cycles(1)", "more cycles (Wave)", key_display="+"),
        Binding("minus", "cycles(-1)", "fewer cycles (Wave)", key_display="-"),
        Binding("space", "freeze", "freeze the picture, and go on; measuring never stops"),
        Binding("c", "paper('cautions')", "the cautions again"),
        Binding("question_mark,f1", "paper('help')", "this help", key_display="?"),
        Binding("enter,escape", "close_paper", "back to the page", key_display="enter"),
        Binding("q,ctrl+q,ctrl+c", "leave", "leave; what was measured is kept", key_display="q"),
    ]

    def __init__(
        self,
        poll: Callable[[], Snapshot],
        *,
        settings: Settings,
        cautions: Sequence[str] = (),
        leave_after: float | None = None,
    ) -> None:
        """Show what `poll` gives.

        Args:
            poll: the latest Snapshot; must not wait.
            cautions: title and sentences shown first; none: straight to the page.
            leave_after: leave by itself after so many seconds.
        """
        super().__init__(ansi_color=settings.theme == "mono")
        self._poll = poll
        self._cautions = tuple(cautions)
        self._leave_after = leave_after
        self._paper = "cautions" if self._cautions else ""
        self._snapshot = poll()
        self._number = -1
        self.view = View(glyphs=settings.glyphs)
        self._canvas = Canvas(palette(settings.theme), self._draw)
        self._background = palette(settings.theme).background

    def compose(self) -> ComposeResult:
        """One canvas is the whole screen."""
        yield self._canvas

    def on_mount(self) -> None:
        """Begin to look."""
        if self._background != "default":
            self.screen.styles.background = self._background
        self.set_interval(POLL, self._look)
        if self._leave_after is not None:
            self.set_timer(self._leave_after, self.exit)

    def _look(self) -> None:
        self._snapshot = self._poll()
        if self._snapshot.number != self._number:
            self._number = self._snapshot.number
            self._canvas.redraw()

    def _draw(self, width: int, height: int) -> list[Line]:
        lines = self._draw_page(width, height)
        return lines_in_ascii(lines) if self.view.ascii_only else lines

    def _draw_page(self, width: int, height: int) -> list[Line]:
        ascii_only = self.view.ascii_only
        if self._paper == "cautions":
            return papers.cautions(self._cautions[0], self._cautions[1:], width, height, ascii_only)
        if self._paper == "help":
            return papers.help_(self._keys(), width, height, ascii_only)
        snapshot = self.view.frozen or self._snapshot
        return PAGES[self.view.page](snapshot, self.view, width, height)

    def _keys(self) -> list[tuple[str, str]]:
        """Keys and words from the bindings themselves, so that help cannot lag behind."""
        keys = []
        for binding in self.BINDINGS:
            assert isinstance(binding, Binding)
            keys.append((binding.key_display or binding.key.split(",")[0], binding.description))
        return keys

    def on_key(self) -> None:
        """Any key leaves the help."""
        if self._paper == "help":
            self._paper = ""
            self._canvas.redraw()

    def action_page(self, page: str) -> None:
        """Show a page."""
        if self._paper == "cautions":
            return  # read first
        self._paper = ""
        self.view.page = page
        self._canvas.redraw()

    def action_paper(self, paper: str) -> None:
        """Show the help or the cautions."""
        if self._paper != "cautions" and (paper != "cautions" or self._cautions):
            self._paper = paper
            self._canvas.redraw()

    def action_close_paper(self) -> None:
        """From a paper back to the page."""
        self._paper = ""
        self._canvas.redraw()

    def action_channel(self, step: int) -> None:
        """Choose another channel."""
        count = max(1, len(self._snapshot.channels))
        self.view.channel = (self.view.channel + step) % count
        self._canvas.redraw()

    def action_scroll(self, step: int) -> None:
        """Show other channels."""
        self.view.first = max(0, self.view.first + step)
        self._canvas.redraw()

    def action_cycles(self, step: int) -> None:
        """Draw more or fewer cycles."""
        self.view.cycles = min(12, max(1, self.view.cycles + step))
        self._canvas.redraw()

    def action_freeze(self) -> None:
        """Hold the picture; measuring goes on behind it."""
        self.view.frozen = None if self.view.frozen is not None else self._snapshot
        self._canvas.redraw()

    def action_leave(self) -> None:
        """Leave."""
        self.exit()
