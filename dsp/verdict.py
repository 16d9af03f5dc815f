"""Verdict: would this kind of meter mislead here, by how much, and how sure is that.

The error of a card comes from one set of samples, so gain and divider errors cancel in it. The
judgement has memory: it changes only after two windows in a row say so, and it leaves a state at
a lower threshold than it entered, so that a wave sitting at the limit does not make it flicker.
"""

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
Codes = npt.NDArray[np.int8]


class Judgement(StrEnum):
    """What is said of a meter's reading."""

    AGREES = "agrees"
    MISLEADS = "misleads"
    UNSURE = "unsure"


# A code in a column is a position here.
JUDGEMENTS = (Judgement.UNSURE, Judgement.AGREES, Judgement.MISLEADS)
_UNSURE, _AGREES, _MISLEADS = range(3)

COVERAGE = 2.0  # standard uncertainties either way: about 95 %
CLEAR = 0.8  # of the limit: below it a meter agrees again
LEAVE = 0.9  # of the limit: where a state is given up for "unsure"
FEW = 16  # cells: fewer are judged one by one


@dataclass(frozen=True, slots=True)
class Verdict:
    """What one meter card would show in one window on one channel, against the true RMS."""

    card: str
    reading: float  # in the channel's unit; NaN when there is no reading
    error: float  # fraction of the true RMS, signed
    u_error: float  # standard uncertainty of `error`
    judgement: Judgement


class Judge:
    """Judges one card on every channel, window after window."""

    def __init__(self, limit: float) -> None:
        """Judge against `limit`, a fraction of the true RMS."""
        self.limit = limit
        self._state: Codes = np.empty(0, np.int8)
        self._last: npt.NDArray[np.int8] = np.empty((0, 3), np.int8)

    def judge(self, error: Floats, u_error: Floats, usable: npt.NDArray[np.bool_]) -> Codes:
        """Judge a run of windows.

        Enters `misleads` when |e| - 2u > L, `agrees` when |e| + 2u < 0.8 L; falls back to `unsure`
        from the first when |e| + 2u < 0.9 L, from the second when |e| - 2u > 0.9 L; each only when
        two windows in a row say so. A window without a usable reading is unsure at once.

        Args:
            error, u_error: (w, c), fractions; NaN where there is none.
            usable: (w, c).
        Returns:
            (w, c) positions in JUDGEMENTS.
        """
        w, c = error.shape
        if len(self._state) != c:
            self._state = np.zeros(c, np.int8)
            self._last = np.zeros((c, 3), np.int8)
        if w * c <= FEW:
            return self._judge_few(error, u_error, usable)
        usable = usable & np.isfinite(error) & np.isfinite(u_error)
        size = np.abs(np.where(usable, error, 0.0))
        spread = COVERAGE * np.where(usable, u_error, 0.0)
        low, high = size - spread, size + spread
        # Where every state would be sent: a target code for each state held, or the same one.
        target = np.empty((w, c, 3), np.int8)
        enter = np.where(
            low > self.limit, _MISLEADS, np.where(high < CLEAR * self.limit, _AGREES, -1)
        ).astype(np.int8)
        for state in (_UNSURE, _AGREES, _MISLEADS):
            target[:, :, state] = np.where(enter >= 0, enter, state)
        leave = (enter < 0) & (low > LEAVE * self.limit)
        target[leave, _AGREES] = _UNSURE
        leave = (enter < 0) & (high < LEAVE * self.limit)
        target[leave, _MISLEADS] = _UNSURE
        target[~usable] = _UNSURE
        codes = np.empty((w, c), np.int8)
        for k in range(c):
            codes[:, k] = self._follow(k, target[:, k], usable[:, k])
        return codes

    def _judge_few(self, error: Floats, u_error: Floats, usable: npt.NDArray[np.bool_]) -> Codes:
        """The same rules for a window or two, where columns would cost twenty times as much."""
        w, c = error.shape
        codes = np.empty((w, c), np.int8)
        for k in range(c):
            state, before = int(self._state[k]), self._last[k].tolist()
            for row in range(w):
                target = list(range(3))
                size, spread = abs(float(error[row, k])), COVERAGE * float(u_error[row, k])
                known = bool(usable[row, k]) and math.isfinite(size) and math.isfinite(spread)
                if not known:
                    target = [_UNSURE] * 3
                elif size - spread > self.limit:
                    target = [_MISLEADS] * 3
                elif size + spread < CLEAR * self.limit:
                    target = [_AGREES] * 3
                else:
                    if size - spread > LEAVE * self.limit:
                        target[_AGREES] = _UNSURE
                    if size + spread < LEAVE * self.limit:
                        target[_MISLEADS] = _UNSURE
                if target[state] == before[state] or not known:
                    state = target[state]
                codes[row, k] = state
                before = target
            self._state[k], self._last[k] = state, before
        return codes

    def _follow(self, k: int, target: Codes, usable: npt.NDArray[np.bool_]) -> Codes:
        """Walk from one change of state to the next; a quiet hour is one step."""
        w = len(target)
        before = np.concatenate((self._last[k][None, :], target[:-1]))
        self._last[k] = target[-1]
        states = np.arange(3, dtype=np.int8)
        moves = (target != states) & ((target == before) | ~usable[:, None])
        codes = np.empty(w, np.int8)
        state, at = int(self._state[k]), 0
        where = [np.flatnonzero(moves[:, s]) for s in range(3)]
        while at < w:
            ahead = where[state]
            i = int(np.searchsorted(ahead, at))
            change = int(ahead[i]) if i < len(ahead) else w
            codes[at:change] = state
            if change < w:
                state = int(target[change, state])
                codes[change] = state
            at = change + 1
        self._state[k] = state
        return codes
