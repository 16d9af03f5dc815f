"""A table of a setup, read field by field; a complaint names the line and the fix."""

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from acquisition.stream import clean
from rig.errors import SetupError
from rig.key_lines import Path


@dataclass(frozen=True, slots=True, eq=False)
class Fields:
    """One table and where it stands."""

    values: Mapping[str, Any]
    path: Path
    lines: Mapping[Path, int]
    where: str

    @property
    def line(self) -> int | None:
        """Line of the table's heading."""
        return self._line_of(self.path)

    def wrong(self, what: str, fix: str, key: str | None = None) -> SetupError:
        """The complaint, at the key's line, or at the table's."""
        return SetupError(self.where, self.line_of(key), what, fix)

    def line_of(self, key: str | None) -> int | None:
        """Line of a key; of the table when it has no such key."""
        return self._line_of(self.path if key is None else (*self.path, key))

    def known(self, keys: tuple[str, ...]) -> None:
        """Refuse a key that is not one of these."""
        for key in self.values:
            if key not in keys:
                longer = [one for one in keys if one.startswith(key.lower()) and len(key) > 2]
                near = longer or difflib.get_close_matches(key.lower(), keys, 1)
                fix = f"did you mean {near[0]}?" if near else f"known here: {', '.join(keys)}"
                raise self.wrong(f"{clean(key) or 'an empty key'} is not known here", fix, key)

    def number(self, key: str, low: float, high: float) -> float | None:
        """A finite number from `low` to `high`."""
        value = self.values.get(key)
        if value is None:
            return None
        if isinstance(value, bool) or not isinstance(value, int | float):
            example = (
                value if isinstance(value, str) and _is_number(value) else f"{_inside(low, high):g}"
            )
            raise self.wrong(f"{key} is not a number", f"write {key} = {example}", key)
        # A whole number may be longer than any float: compare before converting.
        if not low <= value <= high:
            shown = f" = {value:g}" if isinstance(value, float) or abs(value) < 10**18 else ""
            raise self.wrong(
                f"{key}{shown} is out of range", f"it lies from {low:g} to {high:g}", key
            )
        return float(value)

    def whole(self, key: str, low: int, high: int) -> int | None:
        """A whole number from `low` to `high`."""
        value = self.number(key, low, high)
        if value is not None and value != int(value):
            raise self.wrong(
                f"{key} = {value:g} is not whole", f"write a whole number from {low} to {high}", key
            )
        return None if value is None else int(value)

    def text(self, key: str) -> str | None:
        """Text, cleaned."""
        value = self.values.get(key)
        if value is None:
            return None
        if not isinstance(value, str):
            raise self.wrong(f"{key} is not text", f'write {key} = "…" in quotes', key)
        return clean(value)

    def flag(self, key: str) -> bool:
        """True or false; false when left away."""
        value = self.values.get(key, False)
        if not isinstance(value, bool):
            raise self.wrong(
                f"{key} is neither true nor false", f"write {key} = true, without quotes", key
            )
        return value

    def choice(self, key: str, choices: tuple[str, ...]) -> str | None:
        """One of a few words."""
        value = self.text(key)
        if value is not None and value not in choices:
            listed = f"{', '.join(choices[:-1])} or {choices[-1]}"
            raise self.wrong(
                f"{key} {value or 'without a word'} is not known", f"use {listed}", key
            )
        return value

    def table(self, key: str) -> "Fields":
        """A table of its own; empty when left away."""
        value = self.values.get(key, {})
        if not isinstance(value, dict):
            raise self.wrong(f"{key} is not a table", f"write [{key}] on a line of its own", key)
        return Fields(value, (*self.path, key), self.lines, self.where)

    def rows(self, key: str) -> list["Fields"]:
        """A list of tables; empty when left away."""
        value = self.values.get(key, [])
        if not isinstance(value, list) or not all(isinstance(row, dict) for row in value):
            raise self.wrong(
                f"{key} is not a list of tables", f"write [[{key}]] with two brackets", key
            )
        return [
            Fields(row, (*self.path, key, n), self.lines, self.where) for n, row in enumerate(value)
        ]

    def _line_of(self, path: Path) -> int | None:
        while path:
            if path in self.lines:
                return self.lines[path]
            path = path[:-1]
        return None


def _is_number(text: str) -> bool:
    try:
        return math.isfinite(float(text))
    except ValueError:
        return False


def _inside(low: float, high: float) -> float:
    """A usual number that lies in the range, for an example."""
    return next((n for n in (1.0, 50.0, 12.0) if low <= n <= high), low)
