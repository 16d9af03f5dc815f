"""Raw interleaved 16-bit words: decoder and encoder. Nothing can be checked, only suspected.

A lost byte swaps high and low bytes from there on, and high bytes then jump about as low ones do;
a lost word moves every channel by one place. Both are looked for on a fixed grid of short units,
so that what is found does not depend on how the bytes were sliced; a unit that looks wrong is left
out and the alignment taken anew. Loss is unknown, never 0.
"""

import numpy as np
import numpy.typing as npt

from acquisition.accounting import Tally
from acquisition.block import Block, BlockFlag
from acquisition.stream import ChannelHint, StreamInfo

UNIT_SETS = 256  # 32 ms at 8 kS/s: how late a loss may be seen
LOOK_SETS = 16  # sets at a unit's end that are looked at; an offset lasts once it is there
CALM = 24.0  # mean step of a high byte that no true signal of 20 samples a cycle reaches
WORD = 2
LEARN_UNITS = 8  # units from which each channel's usual place and spread are taken
PLAIN = {
    ("u16", "little"): "<u2",
    ("i16", "little"): "<i2",
    ("u16", "big"): ">u2",
    ("i16", "big"): ">i2",
}


class RawDecoder:
    """Decodes words of a known kind; see `acquisition.wire.decoder.Decoder`."""

    def __init__(
        self,
        channels: int,
        sample_type: str = "u16",
        byte_order: str = "little",
        rate: float | None = None,
        notes: tuple[str, ...] = (),
    ) -> None:
        self._channels = channels
        self._kind = np.dtype(PLAIN[sample_type, byte_order])
        self._high = 1 if byte_order == "little" else 0  # where in a word the high byte lies
        self._set_bytes = WORD * channels
        self._unit_bytes = UNIT_SETS * self._set_bytes
        self._tail = b""
        self._position = 0
        self._gap = False
        self._flags = BlockFlag.NONE
        self._received = 0
        self._bad = 0
        self._bytes = 0
        self._reconnects = 0
        self._usual: npt.NDArray[np.float64] | None = None  # (channels, 2): mean and spread
        self._learned: list[npt.NDArray[np.float64]] = []
        self.problem = ""
        hints = tuple(ChannelHint(name=f"ch{c + 1}", step=1.0) for c in range(channels))
        self.info: StreamInfo | None = StreamInfo(
            format="raw",
            channels=hints,
            rate=rate,
            sample_type=sample_type,
            byte_order=byte_order,
            bits=16,
            notes=notes,
        )

    @property
    def tally(self) -> Tally:
        """The account so far; `lost` is unknown. `bad_frames` counts units left out."""
        return Tally(
            received=self._received,
            lost=None,
            bad_frames=self._bad,
            discarded_bytes=self._bytes,
            reconnects=self._reconnects,
        )

    def feed(self, data: bytes, arrived: float) -> list[Block]:
        """Decode the units that are whole by now."""
        held = self._tail + data if self._tail else data
        units = len(held) // self._unit_bytes
        blocks: list[Block] = []
        at = 0
        while units:
            view = np.frombuffer(held, np.uint8, units * self._unit_bytes, at)
            good = self._calm_units(view.reshape(units, UNIT_SETS, self._channels, WORD))
            if good:
                self._emit(view[: good * self._unit_bytes], arrived, blocks)
                at += good * self._unit_bytes
            if good < units:
                at += self._realign(held[at : at + self._unit_bytes])
            units = (len(held) - at) // self._unit_bytes
        self._tail = held[at:]
        return blocks

    def reconnected(self) -> None:
        """The link is back; a byte may be missing, which the next units will show."""
        self._bytes += len(self._tail)
        self._tail = b""
        self._gap = True
        self._flags |= BlockFlag.RECONNECT
        self._reconnects += 1

    def finish(self) -> list[Block]:
        """Give the sets of the last unit, which is not whole."""
        blocks: list[Block] = []
        whole = len(self._tail) // self._set_bytes * self._set_bytes
        if whole:
            self._emit(np.frombuffer(self._tail, np.uint8, whole), float("nan"), blocks)
        self._bytes += len(self._tail) - whole
        self._tail = b""
        return blocks

    def _calm_units(self, units: npt.NDArray[np.uint8]) -> int:
        """How many units from the first on look right."""
        ends = units[:, -LOOK_SETS:, :, self._high]
        steps = np.diff(ends, axis=1).view(np.int8)
        rough = np.abs(steps.astype(np.int16)).mean(axis=(1, 2))
        wrong = rough > CALM
        for k in np.flatnonzero(wrong).tolist():
            if self._swapped(units[k]):
                return int(k)
        if self._channels == 1:
            return len(units)
        for k in range(len(units)):
            if self._moved(units[k]):
                return k
        return len(units)

    def _swapped(self, unit: npt.NDArray[np.uint8]) -> bool:
        """Whether, at the unit's end, high bytes jump about more than low ones."""
        tail = unit[-4 * LOOK_SETS :]
        steps = np.abs(np.diff(tail, axis=0).view(np.int8).astype(np.int16)).mean(axis=(0, 1))
        return bool(steps[self._high] > 1.5 * steps[1 - self._high])

    def _moved(self, unit: npt.NDArray[np.uint8]) -> bool:
        """Whether the channels have changed places against what was learned."""
        words = unit.reshape(UNIT_SETS, self._set_bytes).view(self._kind).astype(np.float64)
        spread = np.stack((words.mean(axis=0), words.std(axis=0)), axis=1)
        if self._usual is None:
            self._learned.append(spread)
            if len(self._learned) == LEARN_UNITS:
                self._usual = np.median(self._learned, axis=0)
                self._learned = []
            return False
        usual = self._usual
        here = _distance(spread, usual)
        shifted = min(
            _distance(np.roll(spread, turn, axis=0), usual) for turn in range(1, self._channels)
        )
        if here <= 0.25 * _distance(np.roll(usual, 1, axis=0), usual):
            self._usual = usual + 0.05 * (spread - usual)  # a load that changes slowly
            return False
        return shifted < 0.25 * here

    def _realign(self, unit: bytes) -> int:
        """Leave out a unit that looks wrong; returns the bytes to step over."""
        best, best_score = 0, np.inf
        for shift in range(self._set_bytes):
            score = self._misfit(
                unit[shift + len(unit) // 2 // self._set_bytes * self._set_bytes :]
            )
            if score < best_score:
                best, best_score = shift, score
        skip = self._unit_bytes + best
        self._bad += 1
        self._bytes += skip
        self._gap = True
        self._position += UNIT_SETS
        return skip

    def _misfit(self, data: bytes) -> float:
        """How badly bytes fit when a set is taken to begin at the first of them."""
        whole = len(data) // self._set_bytes * self._set_bytes
        octets = np.frombuffer(data, np.uint8, whole).reshape(-1, self._channels, WORD)
        high = octets[-4 * LOOK_SETS :, :, self._high]
        rough = float(np.abs(np.diff(high, axis=0).view(np.int8).astype(np.int16)).mean())
        if self._usual is None:
            return rough
        words = np.frombuffer(data, self._kind, whole // WORD).reshape(-1, self._channels)
        tail = words[-4 * LOOK_SETS :].astype(np.float64)
        place = np.stack((tail.mean(axis=0), tail.std(axis=0)), axis=1)
        return rough + _distance(place, self._usual)

    def _emit(self, view: npt.NDArray[np.uint8], arrived: float, blocks: list[Block]) -> None:
        codes = view.view(self._kind).reshape(-1, self._channels).T
        blocks.append(
            Block(
                codes=codes,
                index=self._position,
                lost_before=None if self._gap else 0,
                gap_before=self._gap,
                arrived=arrived,
                flags=self._flags,
            )
        )
        self._gap = False
        self._flags = BlockFlag.NONE
        self._position += codes.shape[1]
        self._received += codes.shape[1]


def _distance(a: npt.NDArray[np.float64], b: npt.NDArray[np.float64]) -> float:
    return float(np.abs(a - b).sum())


def encode_raw(
    codes: npt.NDArray[np.generic], *, sample_type: str = "u16", byte_order: str = "little"
) -> bytes:
    """(channels, sets) as interleaved words."""
    kind = PLAIN[sample_type, byte_order]
    return np.asarray(codes).T.astype(kind, casting="unsafe").tobytes()
