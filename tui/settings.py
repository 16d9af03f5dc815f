"""How the screen is to look: chosen once at the start."""

import os
import sys
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Settings:
    """Theme and glyphs in force."""

    theme: str = "dark"
    glyphs: str = "braille"

    @classmethod
    def chosen(cls, theme: str | None = None, glyphs: str = "auto") -> "Settings":
        """What the person asked for, the rest from the terminal."""
        if theme is None:
            theme = "mono" if os.environ.get("NO_COLOR") else "dark"
        if glyphs == "auto":
            glyphs = _glyphs_of_terminal(sys.stdout.encoding or "", os.environ.get("TERM", ""))
        return cls(theme, glyphs)


def _glyphs_of_terminal(encoding: str, term: str) -> str:
    """Braille needs UTF-8 and a font: the Linux console has the blocks only."""
    if "utf" not in encoding.lower():
        return "ascii"
    if term == "linux":
        return "half"
    if term in ("dumb", "vt100", "vt220"):
        return "ascii"
    return "braille"
