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
CALM = 2.0  # mean step of high bytes above which a unit is looked at closely
SWAPPED = 1.5  # high bytes that step so much more than low ones are not high bytes
STRIDE = 16  # every so many sets tell where a channel lies
EPOCH = 1024  # units after which what is usual is learned afresh
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
        self._skip = 0  # bytes still to be left out
        self._position = 0
        self._gap = False
        self._flags = BlockFlag.NONE
        self._received = 0
        self._bad = 0
        self._bytes = 0
        self._reconnects = 0
        self._usual: npt.NDArray[np.float64] | None = None  # (channels, 2): mean and spread
        self._learned = 0  # units that _sum is of
        self._sum = np.zeros((channels, 2))
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
        if self._skip:
            dropped = min(self._skip, len(held))
            self._skip -= dropped
            self._bytes += dropped
            held = held[dropped:]
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
                skip = self._realign(held[at : at + self._unit_bytes])
                dropped = min(skip, len(held) - at)
                self._skip = skip - dropped
                self._bytes += dropped
                at += dropped
            units = (len(held) - at) // self._unit_bytes
        self._tail = held[at:]
        return blocks

    def reconnected(self) -> None:
        """The link is back; a byte may be missing, which the next units will show."""
        self._bytes += len(self._tail)
        self._tail = b""
        self._skip = 0
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
        good = len(units)
        rough = _steps(units[:, -LOOK_SETS:, :, self._high])
        suspect = np.flatnonzero(rough > CALM)
        if len(suspect):
            tails = units[suspect, -4 * LOOK_SETS :]
            high, low = _steps(tails[..., self._high]), _steps(tails[..., 1 - self._high])
            swapped = suspect[high > SWAPPED * low]
            if len(swapped):
                good = int(swapped[0])
        if self._channels == 1 or not good:
            return good
        return self._unmoved(self._places(units[:good, ::STRIDE]))

    def _unmoved(self, places: npt.NDArray[np.float64]) -> int:
        """How many of these units have each channel where it was; learns where that is.

        What is usual changes only at every EPOCH-th unit, so that slicing changes nothing.
        """
        done = 0
        while done < len(places):
            wanted = LEARN_UNITS if self._usual is None else EPOCH
            here = places[done : done + wanted - self._learned]
            if self._usual is not None:
                moved = np.flatnonzero(self._have_moved(here, self._usual))
                if len(moved):
                    self._learn(here[: moved[0]])
                    return done + int(moved[0])
            self._learn(here)
            done += len(here)
            if self._learned == wanted:
                found = self._sum / wanted
                self._usual = found if self._usual is None else 0.5 * (self._usual + found)
                self._learned, self._sum = 0, np.zeros_like(found)
        return done

    def _learn(self, places: npt.NDArray[np.float64]) -> None:
        self._learned += len(places)
        self._sum = self._sum + places.sum(axis=0)

    def _have_moved(
        self, places: npt.NDArray[np.float64], usual: npt.NDArray[np.float64]
    ) -> npt.NDArray[np.bool_]:
        """Whether units fit far better with their channels turned by some places."""
        here = np.abs(places - usual).sum(axis=(1, 2))
        turned = np.min(
            [
                np.abs(np.roll(places, turn, axis=1) - usual).sum(axis=(1, 2))
                for turn in range(1, self._channels)
            ],
            axis=0,
        )
        moved: npt.NDArray[np.bool_] = turned < 0.25 * here
        return moved

    def _places(self, octets: npt.NDArray[np.uint8]) -> npt.NDArray[np.float64]:
        """(units, sets, channels, 2) bytes to mean and spread, (units, channels, 2)."""
        words = np.ascontiguousarray(octets).view(self._kind)[..., 0].transpose(0, 2, 1)
        x = words.astype(np.float32, order="C")  # sets last: numpy sums along memory
        origin = x[..., :1].copy()
        x -= origin
        mean = x.mean(axis=-1, dtype=np.float64)
        power = np.einsum("ucs,ucs->uc", x, x) / x.shape[-1]
        spread = np.sqrt(np.maximum(power - mean * mean, 0.0))
        return np.stack((mean + origin[..., 0], spread), axis=2)

    def _realign(self, unit: bytes) -> int:
        """Leave out a unit that looks wrong; returns the bytes to step over."""
        half = len(unit) // 2 // self._set_bytes * self._set_bytes
        scores = [self._misfit(unit[half + shift :]) for shift in range(self._set_bytes)]
        self._bad += 1
        self._gap = True
        self._position += UNIT_SETS
        return self._unit_bytes + int(np.argmin(scores))

    def _misfit(self, data: bytes) -> float:
        """How badly bytes fit when a set is taken to begin at the first of them."""
        whole = len(data) // self._set_bytes * self._set_bytes
        octets = np.frombuffer(data, np.uint8, whole).reshape(-1, self._channels, WORD)
        tail = octets[-4 * LOOK_SETS :]
        rough = float(_steps(tail[None, :, :, self._high])[0])
        if self._usual is None:
            return rough
        place = self._places(tail[None])[0]
        return rough + float(np.abs(place - self._usual).sum())

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


def _steps(octets: npt.NDArray[np.uint8]) -> npt.NDArray[np.float64]:
    """(units, sets, channels): how far bytes step from set to set, the short way round; a mean."""
    lying = np.ascontiguousarray(octets.transpose(0, 2, 1))
    steps = np.diff(lying, axis=-1).view(np.int8).reshape(len(lying), -1)
    # As unsigned, so that -128 has a magnitude.
    means: npt.NDArray[np.float64] = np.abs(steps).view(np.uint8).mean(axis=-1, dtype=np.float64)
    return means


def encode_raw(
    codes: npt.NDArray[np.generic], *, sample_type: str = "u16", byte_order: str = "little"
) -> bytes:
    """(channels, sets) as interleaved words."""
    kind = PLAIN[sample_type, byte_order]
    return np.asarray(codes).T.astype(kind, casting="unsafe").tobytes()
