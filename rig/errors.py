"""What can be wrong with a setup. The message says where and what, the notes what to do."""


class RigError(Exception):
    """Anything this room raises on purpose."""


class SetupError(RigError):
    """A setup file cannot be used."""

    def __init__(self, where: str, line: int | None, what: str, fix: str = "") -> None:
        """Say that `what` is wrong at `line` (1 the first; None: nowhere in particular)."""
        place = f"{where}, line {line}" if line is not None else where
        super().__init__(f"{place}: {what}")
        self.where = where
        self.line = line
        self.what = what
        if fix:
            self.add_note(fix)
