"""Turns Blocks of codes into Waveforms in volts and amperes."""

import numpy as np
import numpy.typing as npt

from acquisition.block import Block
from acquisition.stream import StreamInfo
from dsp.waveform import Waveform
from rig.channels import describe, matched, scale
from rig.setup import Setup

Floats = npt.NDArray[np.float64]


class Scaler:
    """Scales every channel of one stream: value = gain * (code + offset)."""

    def __init__(self, setup: Setup, info: StreamInfo) -> None:
        """Join a setup to a stream.

        Raises:
            SetupError: the setup names an input that the stream does not have.
        """
        self.channels = describe(setup, info)
        scales = [
            scale(said, hint)
            for said, hint in zip(matched(setup, info), info.channels, strict=True)
        ]
        self._gain = np.array([gain for gain, _, _ in scales])[:, None]
        self._offset = np.array([offset for _, offset, _ in scales])[:, None]
        self._plain = bool(np.all(self._gain == 1.0) and np.all(self._offset == 0.0))
        self._skipped = 0  # sets at the end of what came last that were no numbers
        self._lost: int | None = 0  # sets missing before those; told with the next Waveform
        self._floating = not info.sample_type.startswith(("u", "i"))

    def waveforms(self, block: Block, rate: float) -> list[Waveform]:
        """Waveforms of one block: one, or several when sets that are no numbers part it.

        Args:
            block: codes (channels, sets).
            rate: sets a second.
        """
        codes = block.codes
        if codes.dtype == np.float64 and self._plain:
            samples = codes.astype(np.float64, copy=False)
        else:
            samples = codes.astype(np.float64)
            samples += self._offset
            samples *= self._gain
        if self._floating or codes.dtype.kind == "f":
            good: npt.NDArray[np.bool_] = np.asarray(np.isfinite(samples).all(axis=0))
            if self._skipped or not good.all():
                return self._parted(block, samples, good, rate)
        return [
            Waveform(
                samples=samples,
                rate=rate,
                start=block.index,
                gap_before=block.gap_before,
                lost_before=block.lost_before,
                arrived=block.arrived,
            )
        ]

    def _parted(
        self, block: Block, samples: Floats, good: npt.NDArray[np.bool_], rate: float
    ) -> list[Waveform]:
        edges = np.flatnonzero(np.diff(np.concatenate(([False], good, [False])).astype(np.int8)))
        parts: list[Waveform] = []
        lost = _sum(self._lost, block.lost_before)
        gap = block.gap_before or self._skipped > 0
        missing = self._skipped
        done = 0
        for a, b in edges.reshape(-1, 2).tolist():
            missing += a - done
            parts.append(
                Waveform(
                    samples=np.ascontiguousarray(samples[:, a:b]),
                    rate=rate,
                    start=block.index + a,
                    gap_before=gap or missing > 0,
                    lost_before=_sum(lost, missing),
                    arrived=block.arrived,
                )
            )
            lost, gap, missing, done = 0, False, 0, b
        self._skipped = missing + len(good) - done
        self._lost = lost
        return parts


def _sum(one: int | None, other: int | None) -> int | None:
    """Of two counts, either of which may be unknown."""
    return None if one is None or other is None else one + other
