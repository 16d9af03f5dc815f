"""Large digits, readable from across the room: our own seven strokes, three or five rows tall."""

# Strokes: top, upper left, upper right, middle, lower left, lower right, bottom.
_STROKES = {
    "0": "1110111", "1": "0010010", "2": "1011101", "3": "1011011", "4": "0111010",
    "5": "1101011", "6": "1101111", "7": "1010010", "8": "1111111", "9": "1111011",
    "-": "0001000", " ": "0000000",
}  # fmt: skip


def large(text: str, rows: int, ascii_only: bool) -> list[str]:
    """Text of digits, point, minus and space as `rows` (3 or 5) lines of equal width."""
    glyphs = [_glyph(c, rows, ascii_only) for c in text]
    return ["".join(glyph[y] for glyph in glyphs) for y in range(rows)]


def width_of(text: str, rows: int) -> int:
    """Cells that `large` takes for a text."""
    wide = 4 if rows == 3 else 6
    return sum(2 if c == "." else wide for c in text)


def _glyph(c: str, rows: int, ascii_only: bool) -> list[str]:
    if c == ".":
        dot = "o" if ascii_only else "▪"
        return [*["  "] * (rows - 1), f"{dot} "]
    on = [bit == "1" for bit in _STROKES.get(c, _STROKES[" "])]
    top, ul, ur, mid, ll, lr, low = on
    if rows == 3:
        return _three(top, ul, ur, mid, ll, lr, low, ascii_only)
    return _five(top, ul, ur, mid, ll, lr, low, ascii_only)


def _three(
    top: bool, ul: bool, ur: bool, mid: bool, ll: bool, lr: bool, low: bool, ascii_only: bool
) -> list[str]:
    if ascii_only:
        return [
            f" {'_' if top else ' '}  ",
            f"{'|' if ul else ' '}{'_' if mid else ' '}{'|' if ur else ' '} ",
            f"{'|' if ll else ' '}{'_' if low else ' '}{'|' if lr else ' '} ",
        ]
    # Box lines join by themselves: each corner is the character of the strokes that meet in it.
    return [
        _corner(False, False, top, ul) + _bar(top) + _corner(False, top, False, ur) + " ",
        _corner(ul, False, mid, ll) + _bar(mid) + _corner(ur, mid, False, lr) + " ",
        _corner(ll, False, low, False) + _bar(low) + _corner(lr, low, False, False) + " ",
    ]


def _bar(on: bool) -> str:
    return "━" if on else " "


# (up, left, right, down) -> heavy box character.
_CORNERS = {
    (0, 0, 0, 0): " ", (1, 0, 0, 0): "╹", (0, 1, 0, 0): "╸", (0, 0, 1, 0): "╺", (0, 0, 0, 1): "╻",
    (1, 1, 0, 0): "┛", (1, 0, 1, 0): "┗", (1, 0, 0, 1): "┃", (0, 1, 1, 0): "━", (0, 1, 0, 1): "┓",
    (0, 0, 1, 1): "┏", (1, 1, 1, 0): "┻", (1, 1, 0, 1): "┫", (1, 0, 1, 1): "┣", (0, 1, 1, 1): "┳",
    (1, 1, 1, 1): "╋",
}  # fmt: skip


def _corner(up: bool, left: bool, right: bool, down: bool) -> str:
    return _CORNERS[(int(up), int(left), int(right), int(down))]


def _five(
    top: bool, ul: bool, ur: bool, mid: bool, ll: bool, lr: bool, low: bool, ascii_only: bool
) -> list[str]:
    ink = "#" if ascii_only else "█"

    def across(on: bool, left: bool, right: bool) -> str:
        return (
            (ink if on or left else " ") + (ink if on else " ") * 3 + (ink if on or right else " ")
        )

    def sides(left: bool, right: bool) -> str:
        return (ink if left else " ") + "   " + (ink if right else " ")

    return [
        across(top, ul, ur) + " ",
        sides(ul, ur) + " ",
        across(mid, ul or ll, ur or lr) + " ",
        sides(ll, lr) + " ",
        across(low, ll, lr) + " ",
    ]
