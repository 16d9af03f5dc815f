"""The judgement's rules, told again one window at a time, and what they are for: no flicker."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays

from dsp.verdict import JUDGEMENTS, Judge, Judgement

LIMIT = 0.02


def rules(error, u, usable):
    """Told from the rules, not from the code: a list of words a channel."""
    words = []
    for k in range(error.shape[1]):
        state, wishes, column = "unsure", [], []
        for e, s, good in zip(np.abs(error[:, k]), u[:, k], usable[:, k], strict=True):
            if not good or not np.isfinite(e + s):
                wishes.append({"unsure": "unsure", "agrees": "unsure", "misleads": "unsure"})
                state = "unsure"
                column.append(state)
                continue
            wish = {}
            for held in ("unsure", "agrees", "misleads"):
                if e - 2 * s > LIMIT:
                    wish[held] = "misleads"
                elif e + 2 * s < 0.8 * LIMIT:
                    wish[held] = "agrees"
                elif (held == "misleads" and e + 2 * s < 0.9 * LIMIT) or (
                    held == "agrees" and e - 2 * s > 0.9 * LIMIT
                ):
                    wish[held] = "unsure"
                else:
                    wish[held] = held
            wishes.append(wish)
            if len(wishes) > 1 and wishes[-2][state] == wish[state]:
                state = wish[state]
            column.append(state)
        words.append(column)
    return words


def spell(codes):
    return [[JUDGEMENTS[code].value for code in column] for column in codes.T]


@settings(deadline=None, max_examples=150)
@given(
    st.integers(1, 40).flatmap(
        lambda w: st.tuples(
            arrays.arrays(float, (w, 2), elements=st.floats(-0.04, 0.04)),
            arrays.arrays(float, (w, 2), elements=st.floats(0.0, 0.006)),
            arrays.arrays(bool, (w, 2), elements=st.sampled_from((True, True, True, False))),
            st.lists(st.integers(1, 30), min_size=1, max_size=40),
        )
    )
)
def test_rules_in_any_pieces(drawn):
    error, u, usable, sizes = drawn
    judge, pieces, at = Judge(LIMIT), [], 0
    for size in [*sizes, 40]:
        if at < len(error):
            part = slice(at, at + size)
            pieces.append(judge.judge(error[part], u[part], usable[part]))
        at += size
    assert spell(np.concatenate(pieces)) == rules(error, u, usable)


@pytest.mark.parametrize("pieces", [1, 50])
def test_a_wave_at_the_limit_does_not_flicker(pieces):
    # An error that wanders by under a tenth of the limit about it: one change in 500 windows.
    rng = np.random.default_rng(8)
    error = LIMIT * (1.0 + rng.uniform(-0.09, 0.09, (500, 1)))
    judge = Judge(LIMIT)
    rows = np.array_split(np.arange(500), 500 // pieces)
    usable = np.ones((500, 1), bool)
    u = np.full((500, 1), 1e-5)
    codes = np.concatenate([judge.judge(error[r], u[r], usable[r]) for r in rows])[:, 0]
    assert np.count_nonzero(np.diff(codes)) == 1


def test_a_start_is_unsure_and_two_windows_decide():
    judge = Judge(LIMIT)
    yes = np.ones((1, 1), bool)
    large, small, none = np.array([[-0.2]]), np.array([[0.001]]), np.array([[0.0001]])
    seen = [judge.judge(e, none, yes)[0, 0] for e in (large, large, small, large, small, small)]
    words = [JUDGEMENTS[int(code)] for code in seen]
    unsure, agrees, misleads = Judgement.UNSURE, Judgement.AGREES, Judgement.MISLEADS
    assert words == [unsure, misleads, misleads, misleads, misleads, agrees]


def test_nothing_to_compare_is_unsure_at_once():
    judge = Judge(LIMIT)
    error, u = np.full((9, 1), 0.2), np.full((9, 1), 1e-3)
    usable = np.ones((9, 1), bool)
    usable[4] = False
    error[7] = np.nan
    words = spell(judge.judge(error, u, usable))[0]
    assert words == [
        "unsure", "misleads", "misleads", "misleads", "unsure",
        "unsure", "misleads", "unsure", "unsure",
    ]  # fmt: skip
