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
        if path.stat().st_size > LARGEST_FILE:
            raise SetupError(where, None, "is over a megabyte and no setup", "name a TOML file")
        text = path.read_text(encoding="utf-8")
    except UnicodeDecodeError:
        raise SetupError(
            where, None, "is not UTF-8 text", "name a TOML file; docs/setup.md has one"
        ) from None
    except OSError as error:
        reason = error.strerror or "cannot be read"
        raise SetupError(
            clean(str(path), 120), None, reason, "check the path; docs/setup.md shows a setup"
        ) from None
    return parse(text, where)
