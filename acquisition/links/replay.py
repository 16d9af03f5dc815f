"""ReplayLink: a logger's captured bytes as a link again, as fast as asked."""

from collections.abc import Iterator
from pathlib import Path

from acquisition.errors import LinkAbsent, LinkForbidden, LinkUnusable
from acquisition.links.pace import Paced, evenly

PIECE = 4096  # bytes handed out at a time


class ReplayLink(Paced):
    """Captured bytes; ends with LinkFinished. See `acquisition.link.Link`."""

    def __init__(self, path: Path, bytes_per_s: float | None = None, speed: float = 1.0) -> None:
        """Open it.

        Args:
            path: the file.
            bytes_per_s: of the line it came from (a tenth of its baud rate); None: at once.
            speed: 2 is twice as fast.
        Raises:
            LinkAbsent, LinkForbidden, LinkUnusable: it cannot be opened.
        """
        try:
            self._file = path.open("rb")
        except FileNotFoundError as error:
            absent = LinkAbsent(f"there is no file {path}")
            absent.add_note("see whether the path is spelt right")
            raise absent from error
        except PermissionError as error:
            raise LinkForbidden(f"this user may not read {path}") from error
        except OSError as error:
            raise LinkUnusable(f"{path} is not a file to replay") from error
        pace = bytes_per_s if bytes_per_s is not None else float("inf")
        super().__init__(evenly(self._pieces_of_file(), pace), path.name, speed)

    def close(self) -> None:
        """Let go of the file."""
        super().close()
        self._file.close()

    def _pieces_of_file(self) -> Iterator[bytes]:
        while not self._file.closed and (piece := self._file.read(PIECE)):
            yield piece
