"""Pages of words: the cautions at the start of a watch, and the help made from the key bindings."""

from collections.abc import Sequence

from tui.lines import Line, fit, rule, wrap
from tui.screens.page import foot


def cautions(
    title: str, sentences: Sequence[str], width: int, height: int, ascii_only: bool
) -> list[Line]:
    """The cautions; measuring already runs behind them."""
    lines: list[Line] = [[], rule([(title, "misleads")], [], width, ascii_only)]
    inner = max(10, width - 8)
    dot = "*" if ascii_only else "•"
    short = height < 3 + sum(len(wrap(s, inner, "text", 9)) for s in sentences) + len(sentences)
    for sentence in sentences:
        for k, row in enumerate(wrap(sentence, inner, "text", 9)):
            lines.append([(f"   {dot} " if k == 0 else "     ", "misleads"), *row])
        if not short:
            lines.append([])
    return _page(lines, [("enter", "I have read this; go on"), ("q", "leave")], width, height)


def help_(
    bindings: Sequence[tuple[str, str]], width: int, height: int, ascii_only: bool
) -> list[Line]:
    """Every key with what it does, and what the shapes mean."""
    lines: list[Line] = [[], rule([("keys", "title")], [], width, ascii_only)]
    for key, words in bindings:
        lines.append([(f"   {key:<10}", "key"), (words, "text")])
    lines += [[], rule([("what the words mean", "title")], [], width, ascii_only)]
    shapes = ("X", "=", "?") if ascii_only else ("▲", "≈", "○")
    for shape, word, words in (
        (shapes[0], "misleads", "an averaging meter is off by more than the limit, for sure"),
        (shapes[1], "agrees", "it reads right, within 0.8 of the limit, for sure"),
        (shapes[2], "unsure", "too near the limit, or the signal is too small, to say"),
    ):
        lines.append([(f"   {shape} {word:<9}", word), (words, "text")])
    for sentence in (
        "An averaging meter takes the mean of the rectified wave and scales it for a sine. "
        "On any other wave that scale is wrong; the true RMS is what heats and loads.",
        "THD-F is the harmonics against the fundamental. Crest factor is peak over true RMS.",
    ):
        lines += [[("   ", "text"), *row] for row in wrap(sentence, max(10, width - 8), "dim", 4)]
    return _page(lines, [("any key", "back")], width, height)


def _page(lines: list[Line], keys: list[tuple[str, str]], width: int, height: int) -> list[Line]:
    shown = [fit(line, width) for line in lines[: max(0, height - 1)]]
    shown += [fit([], width) for _ in range(height - 1 - len(shown))]
    return [*shown, foot(keys, width)][:height]
