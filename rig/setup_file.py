"""Reads a setup from its file."""

from pathlib import Path

from acquisition.stream import clean
from rig.errors import SetupError
from rig.setup import Setup, parse

LARGEST_FILE = 1 << 20  # bytes; a setup is a page or two


def load(path: Path) -> Setup:
    """Read a setup file.

    Raises:
        SetupError: it is missing, not TOML, or says something that cannot be.
    """
    where = clean(path.name, 60)
    try:
        if path.exists() and not path.is_file():
            # A pipe or a device could be read for ever.
            raise SetupError(clean(str(path), 120), None, "is not a file", "name a TOML file")
        with path.open("rb") as file:
            data = file.read(LARGEST_FILE + 1)
    except OSError as error:
        reason = error.strerror or "cannot be read"
        raise SetupError(
            clean(str(path), 120), None, reason, "check the path; docs/setup.md shows a setup"
        ) from None
    if len(data) > LARGEST_FILE:
        raise SetupError(where, None, "is over a megabyte and no setup", "name a TOML file")
    try:
        text = data.decode("utf-8-sig")  # some editors begin a file with a mark of its encoding
    except UnicodeDecodeError as error:
        if data[:2] in (b"\xff\xfe", b"\xfe\xff") or b"\0" in data:
            line = None
        else:
            line = data.count(b"\n", 0, error.start) + 1
        raise SetupError(
            where, line, "is not UTF-8 text", "save it as UTF-8, or name a TOML file"
        ) from None
    return parse(text, where)
