"""The simulated logger: samples a scene through its own front end and sends frames or lines.

It has a true scale of its own, which it states in HELLO (crestwire) and nowhere else: a wrong
setup shows as a difference. What it gives is `(due, bytes)`: when each piece is due in seconds of
the outside world, so that whoever sends it can keep real time. Seeded and repeatable.
"""

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from acquisition.wire.crestwire_encode import encode_data, encode_hello
from acquisition.wire.crestwire_frame import ChannelHello, Hello
from sim.errors import SimError
from sim.faults import Faults, damage
from sim.scenes import Scene

TICK_HZ = 1_000_000
BOOT_SILENCE = 1.2  # s, common for boards that restart through a boot loader
DISCARDED_AT_ONCE = 300  # sets
CHUNK_FRAMES = 16  # sampled at once: numpy is quick on many, slow on few
HELLO_EVERY = 1.0  # s


@dataclass(frozen=True, slots=True)
class LoggerSpec:
    """A simulated logger."""

    scene: Scene
    format: str = "crestwire"  # "crestwire", "text", "raw"
    rate: float = 8000.0  # sets a second by its own clock
    bits: int = 12
    noise_codes: float = 0.5  # RMS, of the front end and converter
    clock_ppm: float = 0.0  # its clock against the world's
    drift_ppm: float = 0.0  # a slow swing of the clock, one period in ten minutes
    seed: int = 1
    sets_per_frame: int = 64
    faults: Faults = field(default_factory=Faults)
    start_index: int = 0  # where the trigger counter stands; near 2**32 to see it wrap


@dataclass(slots=True)
class Account:
    """What the logger did, for whoever checks a receiver's account against it."""

    sampled: int = 0  # sets since the first boot
    sent: int = 0  # sets that left in a frame, or a line
    discarded: int = 0  # sets thrown away on board
    boots: int = 1


def frames(spec: LoggerSpec, account: Account | None = None) -> Iterator[tuple[float, bytes]]:
    """What the logger sends, for ever, as (due in seconds, bytes).

    Raises:
        SimError: the specification cannot be built.
    """
    check(spec)
    return _Board(spec, account or Account()).run()


def check(spec: LoggerSpec) -> None:
    """Refuse what cannot be built.

    Raises:
        SimError: a number out of range, or an unknown wire format.
    """
    if not 200.0 <= spec.rate <= 200_000.0:
        error = SimError(f"a rate of {spec.rate:g} sets a second is out of range")
        error.add_note("choose one from 200 to 200000")
        raise error
    if not 6 <= spec.bits <= 16:
        raise SimError(f"{spec.bits} bits are out of range; choose 6 to 16")
    if not 0.0 <= spec.noise_codes < 1e4:
        raise SimError(f"noise of {spec.noise_codes:g} codes is out of range")
    if spec.format not in ("crestwire", "text", "raw"):
        raise SimError(f"there is no wire format {spec.format}; use crestwire, text or raw")


class _Board:
    def __init__(self, spec: LoggerSpec, account: Account) -> None:
        self._spec = spec
        self._account = account
        self._rng = np.random.default_rng(spec.seed)
        self._bytes_rng = np.random.default_rng((spec.seed, 7))
        self._full = np.array([c.full_scale for c in spec.scene.channels])[:, None]
        self._half = 2 ** (spec.bits - 1)
        self._sequence = 0
        self._boot = 1
        self._index = spec.start_index  # triggers since this boot
        self._hello = _hello(spec)

    def run(self) -> Iterator[tuple[float, bytes]]:
        spec, faults = self._spec, self._spec.faults
        sets = spec.sets_per_frame
        per_chunk = sets * CHUNK_FRAMES
        taken = 0  # sets since the world began, silence included
        next_hello = 0.0
        next_reboot = faults.reboot or np.inf
        next_discard = faults.discard or np.inf
        next_stall, stalled_until = faults.stall or np.inf, 0.0
        while True:
            times = self._times(taken, per_chunk)
            codes = self._sample(times)
            for at in range(0, per_chunk, sets):
                due = float(times[at + sets - 1])
                if due >= next_reboot:
                    next_reboot += faults.reboot
                    taken += at + round(BOOT_SILENCE * spec.rate)
                    self._reboot()
                    next_hello = 0.0
                    break
                if due >= next_stall:
                    next_stall += faults.stall
                    stalled_until = due + 1.0
                flags = 0
                piece = codes[:, at : at + sets]
                if due >= next_discard:
                    next_discard += faults.discard
                    self._throw_away(DISCARDED_AT_ONCE)
                    # The triggers went on counting while nothing was kept.
                    taken += at + DISCARDED_AT_ONCE
                    self._discarding = True
                    break
                if self._discarding:
                    flags, self._discarding = 1, False
                data = b""
                if spec.format == "crestwire" and due >= next_hello:
                    data = self._say_hello()
                    next_hello = due + HELLO_EVERY
                data += self._send(piece, flags)
                self._account.sampled += sets
                self._account.sent += sets
                yield max(due, stalled_until), damage(data, faults, self._bytes_rng)
            else:
                taken += per_chunk

    _discarding: bool = False

    def _times(self, first: int, count: int) -> npt.NDArray[np.float64]:
        """When sets `first`.. are taken: the board's clock against the world's."""
        spec = self._spec
        t = (first + np.arange(count)) / spec.rate
        t = t / (1.0 + spec.clock_ppm * 1e-6)
        if spec.drift_ppm:
            swing = 600.0 / (2.0 * np.pi)
            t = t - spec.drift_ppm * 1e-6 * swing * (1.0 - np.cos(t / swing))
        return t

    def _sample(self, times: npt.NDArray[np.float64]) -> npt.NDArray[np.uint16]:
        spec = self._spec
        level = spec.scene.at(times) / self._full * self._half
        if spec.noise_codes:
            level += spec.noise_codes * self._rng.standard_normal(level.shape)
        codes = np.rint(level + self._half)
        return np.asarray(np.clip(codes, 0, 2 * self._half - 1), np.uint16)

    def _send(self, codes: npt.NDArray[np.uint16], flags: int) -> bytes:
        index = self._index
        self._index += codes.shape[1]
        if self._spec.format == "text":
            return "".join(",".join(map(str, row)) + "\r\n" for row in codes.T.tolist()).encode()
        if self._spec.format == "raw":
            return codes.T.astype("<u2").tobytes()
        self._sequence += 1
        return encode_data(
            codes,
            boot=self._boot,
            sequence=self._sequence - 1,
            index=index,
            tick=self._tick(index),
            flags=flags,
        )

    def _say_hello(self) -> bytes:
        self._sequence += 1
        return encode_hello(
            self._hello,
            boot=self._boot,
            sequence=self._sequence - 1,
            index=self._index,
            tick=self._tick(self._index),
            channels=len(self._spec.scene.channels),
        )

    def _tick(self, index: int) -> int:
        # The tick shares the converter's oscillator: it can show skipped triggers, no rate error.
        return round((index - self._spec.start_index) / self._spec.rate * TICK_HZ)

    def _reboot(self) -> None:
        self._account.boots += 1
        if not self._spec.faults.constant_boot:
            self._boot = (self._boot + 1) & 0xFF
        self._index = 0
        self._sequence = 0

    def _throw_away(self, sets: int) -> None:
        self._index += sets
        self._account.sampled += sets
        self._account.discarded += sets


def _hello(spec: LoggerSpec) -> Hello:
    half = 2 ** (spec.bits - 1)
    return Hello(
        rate_mhz=round(spec.rate * 1000.0),
        tick_hz=TICK_HZ,
        bits=spec.bits,
        tolerance_ppm=100,
        unit_id=f"sim-{spec.scene.name}",
        firmware="sim 1",
        clock=3,
        boot_count=1,
        channels=tuple(
            ChannelHello(
                name=channel.name,
                unit=channel.unit,
                gain=channel.full_scale / half,
                offset=-float(half),
                rails=(0, 2 * half - 1),
            )
            for channel in spec.scene.channels
        ),
    )
