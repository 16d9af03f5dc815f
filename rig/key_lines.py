"""On which line each key of a TOML text stands, so that a complaint can name it.

The standard reader keeps no positions. This walks a text that it has already accepted, so it
may take for granted that every string ends and every bracket closes.
"""

import bisect
import re
import tomllib

Path = tuple[str | int, ...]  # ("channel", 1, "gain"): the gain of the second [[channel]]

_SPACE = re.compile(r"(?:[ \t\r\n]|#[^\n]*)*")
_BARE = re.compile(r"[A-Za-z0-9_-]+")
_SCALAR = re.compile(r"[^,\]}#\n]*")
# A long string may end in one or two quotes of its own before the three that close it.
_STRING = re.compile(
    r'"""(?:\\.|[^\\])*?"""(?:"{1,2})?'
    r"|'''.*?'''(?:'{1,2})?"
    r'|"(?:\\.|[^"\\\n])*"'
    r"|'[^'\n]*'",
    re.DOTALL,
)


def key_lines(text: str) -> dict[Path, int]:
    """Line, from 1, of every key and table heading.

    Args:
        text: TOML that `tomllib` accepts.
    """
    return _Walk(text).lines


class _Walk:
    def __init__(self, text: str) -> None:
        self._text = text
        self._at = 0
        self._ends = [m.start() for m in re.finditer("\n", text)]
        self._counts: dict[Path, int] = {}  # how many of each [[heading]] so far
        self.lines: dict[Path, int] = {}
        table: Path = ()
        self._space()
        while self._at < len(text):
            if text.startswith("[", self._at):
                table = self._heading()
            else:
                self._pair(table)
            self._space()

    def _heading(self) -> Path:
        start = self._at
        several = self._text.startswith("[[", self._at)
        self._at += 2 if several else 1
        keys = self._keys()
        self._at += 2 if several else 1
        path: Path = ()
        for n, key in enumerate(keys, 1):
            path += (key,)
            if several and n == len(keys):
                self._counts[path] = self._counts.get(path, 0) + 1
            if path in self._counts:  # names the latest of several
                self._note(path, start)
                path += (self._counts[path] - 1,)
            self._note(path, start)
        return path

    def _pair(self, table: Path) -> None:
        start = self._at
        path = table
        for key in self._keys():
            path += (key,)
            self._note(path, start)
        self._at += 1  # the equals sign
        self._value(path)

    def _keys(self) -> list[str]:
        keys = []
        while True:
            self._blank()
            bare = _BARE.match(self._text, self._at)
            if bare is not None:
                keys.append(bare[0])
                self._at = bare.end()
            else:
                quoted = self._string()
                keys.append(next(iter(tomllib.loads(f"{quoted} = 0"))))
            self._blank()
            if not self._text.startswith(".", self._at):
                return keys
            self._at += 1

    def _value(self, path: Path) -> None:
        self._space()
        mark = self._text[self._at]
        if mark in "\"'":
            self._string()
        elif mark == "[":
            self._list(path)
        elif mark == "{":
            self._inline(path)
        else:
            found = _SCALAR.match(self._text, self._at)
            assert found is not None  # it matches nothing at least
            self._at = found.end()

    def _list(self, path: Path) -> None:
        self._at += 1
        n = 0
        while True:
            self._space()
            if self._text[self._at] == "]":
                self._at += 1
                return
            if self._text[self._at] == ",":
                self._at += 1
                continue
            self._note((*path, n), self._at)
            self._value((*path, n))
            n += 1

    def _inline(self, path: Path) -> None:
        self._at += 1
        while True:
            self._space()
            if self._text[self._at] == "}":
                self._at += 1
                return
            if self._text[self._at] == ",":
                self._at += 1
                continue
            self._pair(path)

    def _string(self) -> str:
        found = _STRING.match(self._text, self._at)
        assert found is not None  # the text was accepted before
        self._at = found.end()
        return found[0]

    def _space(self) -> None:
        found = _SPACE.match(self._text, self._at)
        assert found is not None  # it matches nothing at least
        self._at = found.end()

    def _blank(self) -> None:
        while self._text[self._at : self._at + 1] in (" ", "\t"):
            self._at += 1

    def _note(self, path: Path, at: int) -> None:
        self.lines.setdefault(path, bisect.bisect_left(self._ends, at) + 1)
