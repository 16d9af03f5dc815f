"""Places runs of sets in the stream of a recording: indices, gaps and how much each one lost."""

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from acquisition.block import Block, Codes

SETS_AT_A_TIME = 1 << 16  # 8 s at 8 kS/s, 1 MB for two channels of float64


class Placer:
    """Hands out Blocks in order. Sets that are missing or unusable count in the index."""

    def __init__(self) -> None:
        self._index = 0
        self._lost: int | None = 0
        self._gap = False

    def miss(self, sets: int | None) -> None:
        """Something is missing here: so many sets, or nobody knows how many."""
        self._gap = True
        if sets is None or self._lost is None:
            self._lost = None
            self._index += sets or 0
        else:
            self._lost += sets
            self._index += sets

    def place(self, codes: Codes) -> Block:
        """The next Block. `codes`: (channels, sets), handed over."""
        block = Block(codes=codes, index=self._index, lost_before=self._lost, gap_before=self._gap)
        self._index += block.sets
        self._lost, self._gap = 0, False
        return block

    def place_good(self, codes: Codes, good: npt.NDArray[np.bool_]) -> Iterator[Block]:
        """Blocks of the runs where `good` (sets,); the other sets are gaps."""
        if good.all():
            if codes.shape[1]:
                yield self.place(codes)
            return
        edges = np.flatnonzero(np.diff(np.concatenate(([False], good, [False])).astype(np.int8)))
        done = 0
        for a, b in edges.reshape(-1, 2).tolist():
            if a > done:
                self.miss(a - done)
            yield self.place(np.ascontiguousarray(codes[:, a:b]))
            done = b
        if done < len(good):
            self.miss(len(good) - done)


def unique(names: list[str]) -> list[str]:
    """Names, none of them empty, none twice: the second U is `U (2)`, the third nameless `ch3`."""
    taken: set[str] = set()
    result: list[str] = []
    for position, name in enumerate(names, 1):
        base = name or f"ch{position}"
        candidate, n = base, 1
        while candidate in taken:
            n += 1
            candidate = f"{base} ({n})"
        taken.add(candidate)
        result.append(candidate)
    return result
