"""Faults on demand: what a cable, a board or a bad day does to a stream of bytes.

Seeded, so a run can be repeated. The stream's own truth (what was sent) is kept by the device.
"""

import dataclasses
from dataclasses import dataclass

import numpy as np

from sim.errors import FaultError


@dataclass(frozen=True, slots=True)
class Faults:
    """How often what goes wrong. Rates are per byte, times in seconds."""

    drop: float = 0.0  # a byte vanishes
    flip: float = 0.0  # one bit of a byte turns
    repeat: float = 0.0  # a byte comes twice
    garbage: float = 0.0  # up to 40 random bytes come in between
    stall: float = 0.0  # every so many seconds the stream pauses for a second, then catches up
    reboot: float = 0.0  # every so many seconds the board restarts and is silent for 1.2 s
    discard: float = 0.0  # every so many seconds the board throws 300 sets away
    constant_boot: bool = False  # the board does not count its boots

    @property
    def any_bytes(self) -> bool:
        """Whether bytes are touched at all."""
        return bool(self.drop or self.flip or self.repeat or self.garbage)


_TIMES = ("stall", "reboot", "discard")


def parse(text: str) -> Faults:
    """Read a list such as `drop=1e-4,reboot=30s`.

    Raises:
        FaultError: an unknown fault or a value that cannot be.
    """
    values: dict[str, float | bool] = {}
    names = [field.name for field in dataclasses.fields(Faults)]
    for item in filter(None, (part.strip() for part in text.split(","))):
        name, equals, value = item.partition("=")
        name = name.strip().replace("-", "_")
        if name not in names:
            raise _wrong(f"{item[:40]!r} is no fault", f"there are {', '.join(names)}")
        if name == "constant_boot":
            values[name] = True
            continue
        try:
            number = float(value.removesuffix("s") if name in _TIMES else value)
        except ValueError:
            number = -1.0
        if not equals or not 0.0 <= number < (1e6 if name in _TIMES else 1.0):
            form = f"{name}=30s" if name in _TIMES else f"{name}=1e-4"
            raise _wrong(f"{item[:40]!r} has no usable value", f"write {form}")
        values[name] = number
    return Faults(**values)  # type: ignore[arg-type]


def damage(data: bytes, faults: Faults, rng: np.random.Generator) -> bytes:
    """The bytes as they arrive."""
    if not faults.any_bytes:
        return data
    out = np.frombuffer(data, np.uint8).copy()
    if faults.flip:
        hit = np.flatnonzero(rng.random(len(out)) < faults.flip)
        out[hit] ^= (1 << rng.integers(0, 8, len(hit))).astype(np.uint8)
    count = np.ones(len(out), np.int64)
    if faults.drop:
        count[rng.random(len(out)) < faults.drop] = 0
    if faults.repeat:
        count[rng.random(len(out)) < faults.repeat] = 2
    damaged = np.repeat(out, count).tobytes()
    if faults.garbage:
        for at in np.flatnonzero(rng.random(len(damaged)) < faults.garbage)[::-1].tolist():
            burst = rng.integers(0, 256, int(rng.integers(1, 41)), dtype=np.uint8).tobytes()
            damaged = damaged[:at] + burst + damaged[at:]
    return damaged


def _wrong(what: str, fix: str) -> FaultError:
    error = FaultError(f"faults: {what}")
    error.add_note(fix)
    return error
