"""Canvas: a widget that shows prepared lines and repaints only those that changed."""

from collections.abc import Callable

from rich.segment import Segment
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

from tui.lines import Line
from tui.palette import Palette


class Canvas(Widget):
    """Fills its place with lines drawn elsewhere."""

    DEFAULT_CSS = "Canvas { width: 1fr; height: 1fr; }"

    def __init__(self, palette: Palette, draw: Callable[[int, int], list[Line]]) -> None:
        """Show what `draw(width, height)` gives."""
        super().__init__()
        self._palette = palette
        self._draw = draw
        self._lines: list[Line] = []
        self._drawn_size = (0, 0)

    def redraw(self) -> None:
        """Draw again; ask for a repaint of the lines that differ."""
        width, height = self.size
        if width < 1 or height < 1:
            return
        lines = self._draw(width, height)
        if self._drawn_size != (width, height):
            self._drawn_size = (width, height)
            self._lines = lines
            self.refresh()
            return
        changed = [
            Region(0, y, width, 1)
            for y, line in enumerate(lines)
            if y >= len(self._lines) or line != self._lines[y]
        ]
        self._lines = lines
        if changed:
            self.refresh(*changed)

    def on_resize(self) -> None:
        """A new size is a new drawing."""
        self.redraw()

    def render_line(self, y: int) -> Strip:
        """One line as Textual wants it."""
        width = self.size.width
        if y >= len(self._lines):
            return Strip.blank(width, self._palette.style("text"))
        style = self._palette.style
        return Strip([Segment(text, style(meaning)) for text, meaning in self._lines[y]], width)
