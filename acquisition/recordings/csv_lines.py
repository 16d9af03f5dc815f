"""Pieces of whole lines out of a text file, however it is encoded and whatever ends its lines."""

import codecs
from collections.abc import Iterator
from pathlib import Path

from acquisition.recordings.readable import damaged, shown, unreadable

PIECE = 1 << 19  # bytes: small enough to stay in a processor's cache while it is parsed
HEAD = 1 << 16  # bytes looked at to find the layout
LONGEST_LINE = 1 << 20  # a longer one is no line of numbers

_MARKS = (
    (codecs.BOM_UTF8, ""),
    (codecs.BOM_UTF16_LE, "utf-16-le"),
    (codecs.BOM_UTF16_BE, "utf-16-be"),
)


class TextFile:
    """A text file, or a part of one, read as UTF-8 bytes with plain newlines."""

    def __init__(self, path: Path, begin: int = 0, end: int | None = None) -> None:
        """Look at the encoding and the line ends. `begin`, `end`: of the part, in bytes."""
        self.path = path
        self.bytes_read = 0
        self._end = end
        with path.open("rb") as file:
            file.seek(begin)
            head = file.read(HEAD if end is None else min(HEAD, end - begin))
        mark, self.wide = next(
            ((mark, name) for mark, name in _MARKS if head.startswith(mark)), (b"", "")
        )
        self._skip = begin + len(mark)
        # A lone carriage return ends lines where no newline does.
        wide_newline = "\n".encode(self.wide) if self.wide else b"\n"
        self._returns = wide_newline not in head
        self.head = head

    def pieces(self, size: int | None = None) -> Iterator[bytes]:
        """Whole lines, each with its newline; the last line as it is, newline or not.

        Raises:
            RecordingDamaged: a line without end, or a fault of the disk.
        """
        decoder = codecs.getincrementaldecoder(self.wide)("replace") if self.wide else None
        rest = b""
        try:
            with self.path.open("rb") as file:
                file.seek(self._skip)
                self.bytes_read = self._skip
                while data := file.read(self._wanted(size or PIECE)):
                    self.bytes_read += len(data)
                    if decoder is not None:
                        data = decoder.decode(data).encode()
                    if self._returns:
                        data = data.replace(b"\r", b"\n")
                    data = rest + data
                    cut = data.rfind(b"\n") + 1
                    rest = data[cut:]
                    if cut:
                        whole = data[:cut]
                        yield whole.replace(b"\r", b"") if b"\r" in whole else whole
                    elif len(rest) > LONGEST_LINE:
                        raise damaged(
                            f"{shown(self.path)}: near byte {self.bytes_read} a line has no end",
                            "this is no table of text; check that it is the right file",
                        )
        except OSError as error:
            raise unreadable(self.path, error) from None
        if rest:
            yield rest.replace(b"\r", b"")

    def _wanted(self, size: int) -> int:
        return size if self._end is None else min(size, self._end - self.bytes_read)

    def head_lines(self) -> list[str]:
        """The first whole lines, for people: UTF-8, or Latin-1 where it is none."""
        piece = next(self.pieces(HEAD), b"")
        try:
            text = piece.decode("utf-8")
        except UnicodeDecodeError:
            text = piece.decode("latin-1")
        lines = text.split("\n")
        return lines[:-1] if lines and lines[-1] == "" else lines

    def count_lines(self) -> int:
        """How many lines there are in all, the last without a newline too."""
        newline = b"\r" if self._returns else b"\n"  # one byte of a wide character is enough
        count, last = 0, b""
        with self.path.open("rb") as file:
            while data := file.read(1 << 22):
                count += data.count(newline)
                last = data
        return count + (not last.rstrip(b"\0").endswith(newline))

    def last_line(self) -> str:
        """The last whole line with something in it, or ""."""
        with self.path.open("rb") as file:
            size = file.seek(0, 2)
            at = max(self._skip, size - 8192)
            file.seek(at - (at - self._skip) % 2)
            data = file.read()
        text = data.decode(self.wide or "latin-1", "replace").replace("\r", "\n")
        lines = text.split("\n")[:-1]
        return next((line for line in reversed(lines) if line.strip()), "")
