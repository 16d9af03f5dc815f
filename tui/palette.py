"""Colours by meaning: blue and orange, which colour-blind eyes tell apart; state is a word too.

Each pair of text and background has a contrast of at least 4.5 to 1 (WCAG 2.1, 1.4.3); a test
works the ratios out.
"""

from collections.abc import Mapping
from dataclasses import dataclass

from rich.style import Style


@dataclass(frozen=True, slots=True)
class Palette:
    """Styles by what they mean."""

    background: str
    styles: Mapping[str, Style]

    def style(self, name: str) -> Style:
        """The style of a meaning; plain text for an unknown one."""
        return self.styles.get(name) or self.styles["text"]


def _palette(background: str, colours: Mapping[str, str], bold: tuple[str, ...]) -> Palette:
    return Palette(
        background,
        {
            name: Style(color=colour, bgcolor=background, bold=name in bold or None)
            for name, colour in colours.items()
        },
    )


_BOLD = ("title", "big", "misleads", "here")

PALETTES: Mapping[str, Palette] = {
    "dark": _palette(
        "#10161d",
        {
            "text": "#d5dde5", "dim": "#8b98a6", "rule": "#72808f", "title": "#f2f5f7",
            "big": "#f2f5f7", "agrees": "#79b8f0", "misleads": "#ffab4d", "unsure": "#c9b98a",
            "trace": "#8fd0ff", "second": "#d0b3ff", "level": "#ffab4d", "rms": "#f2f5f7",
            "bar": "#8fd0ff", "trend": "#93a9bd", "here": "#f2f5f7", "key": "#ffc98f",
        },
        _BOLD,
    ),
    "light": _palette(
        "#f6f4ef",
        {
            "text": "#26303a", "dim": "#5b6672", "rule": "#68737f", "title": "#0d141b",
            "big": "#0d141b", "agrees": "#0b5394", "misleads": "#9c3f00", "unsure": "#6b5a1e",
            "trace": "#0b5394", "second": "#6a3d9a", "level": "#9c3f00", "rms": "#0d141b",
            "bar": "#0b5394", "trend": "#4c5f72", "here": "#0d141b", "key": "#7d3a00",
        },
        _BOLD,
    ),
    "contrast": _palette(
        "#000000",
        {
            "text": "#ffffff", "dim": "#d0d0d0", "rule": "#ffffff", "title": "#ffffff",
            "big": "#ffffff", "agrees": "#9fd8ff", "misleads": "#ffc400", "unsure": "#ffffff",
            "trace": "#ffffff", "second": "#9fd8ff", "level": "#ffc400", "rms": "#ffffff",
            "bar": "#ffffff", "trend": "#ffffff", "here": "#ffffff", "key": "#ffc400",
        },
        _BOLD,
    ),
}  # fmt: skip


def _mono() -> Palette:
    plain = Style()
    named = dict.fromkeys(PALETTES["dark"].styles, plain)
    for name in ("title", "big", "misleads", "here", "rms", "level"):
        named[name] = Style(bold=True)
    named["misleads"] = Style(bold=True, reverse=True)
    named["dim"] = named["rule"] = Style(dim=True)
    return Palette("default", named)


def palette(theme: str) -> Palette:
    """The palette of a theme."""
    return PALETTES[theme] if theme in PALETTES else _mono()
