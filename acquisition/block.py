"""Block: raw codes of all channels as they came, with their place in the stream.

The arrow out of every source, live or recorded. The codes are what the source held: converter
codes, or values already in units when a recording says so; `StreamInfo` tells which.
"""

from dataclasses import dataclass
from enum import IntFlag
from typing import Any

import numpy as np
import numpy.typing as npt

Codes = npt.NDArray[np.number[Any]]


class BlockFlag(IntFlag):
    """What the source said of a block, or what happened just before it."""

    NONE = 0
    DISCARDED = 1  # the logger itself discarded sets before it
    RAIL = 2  # the logger saw its converter touch a rail
    CLOCK_SET = 4
    TEST_PATTERN = 8
    REBOOT = 16  # first block of a new boot
    RECONNECT = 32  # first block after the link came back


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Contiguous sets (one sample of every channel each), never changed once made."""

    codes: Codes  # (channels, sets), read-only
    index: int  # of the first set since the stream began; lost sets are counted, never wraps
    lost_before: int | None = 0  # sets missing between the previous block and this; None: unknown
    gap_before: bool = False  # true when anything is missing, counted or not: never bridge it
    arrived: float = float("nan")  # host monotonic time of its last byte [s]; NaN from a recording
    boot: int = 0  # 0, 1, 2 … boots seen since the stream began
    tick: int | None = None  # the logger's own clock at the first set, unwrapped
    flags: BlockFlag = BlockFlag.NONE

    def __post_init__(self) -> None:
        self.codes.setflags(write=False)

    @property
    def sets(self) -> int:
        """How many sets it holds."""
        return int(self.codes.shape[1])
