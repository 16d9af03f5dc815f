"""The sentences: right digits, right side, nothing said that is not known."""

import math

import pytest

from dsp.verdict import Judgement, Verdict
from shift import wording

QUANTITIES = [
    # value, unit, standard uncertainty, what a technician reads
    (230.0436, "V", 0.02, "230.04 V"),
    (230.0436, "V", 0.3, "230.0 V"),
    (230.0436, "V", 6.0, "230 V"),
    (0.01234, "A", 0.0001, "12.3 mA"),
    (12345.6, "V", 3.0, "12.346 kV"),
    (0.0, "V", None, "0.0 V"),
    (512.25, "counts", 0.4, "512.2 counts"),
    (float("nan"), "V", 0.1, "no reading"),
]


@pytest.mark.parametrize(("value", "unit", "u", "expected"), QUANTITIES)
def test_a_figure_shows_the_digits_it_knows(
    value: float, unit: str, u: float | None, expected: str
) -> None:
    assert wording.quantity(value, unit, u) == expected


@pytest.mark.parametrize(
    ("seconds", "expected"),
    [
        (0.11, "0.110 s"),
        (12.44, "12.4 s"),
        (185.2, "3 min 05 s"),
        (7800.0, "2 h 10 min"),
        (math.nan, "unknown time"),
    ],
)
def test_durations(seconds: float, expected: str) -> None:
    assert wording.duration(seconds) == expected


def test_a_verdict_tells_how_far_and_how_sure() -> None:
    verdict = Verdict("averaging", 85.2, -0.362, 0.001, Judgement.MISLEADS)
    assert wording.judgement_words(verdict) == "misleads (-36.2 % ± 0.2 %)"


def test_no_reading_is_said_as_such() -> None:
    verdict = Verdict("averaging", math.nan, math.nan, math.nan, Judgement.UNSURE)
    assert wording.judgement_words(verdict) == "no reading to compare"


def test_the_cautions_name_every_danger_of_the_trade() -> None:
    # HSE GS38 and IEC 61010-2-030 subjects (from memory, not read).
    said = " ".join(wording.CAUTIONS).lower()
    for subject in (
        "licensed", "proof of dead", "isolat", "cat iii", "fused", "current transformer", "neutral",
    ):  # fmt: skip
        assert subject in said
    assert " safe" not in said  # the tool never calls anything safe


def test_an_uncounted_gap_is_never_told_as_none_missing() -> None:
    assert "cannot tell" in wording.gap(None, None)
    assert "unknown number" in wording.gap_ends(None, 3, 1.0)
    assert "120 of every channel" in wording.gap_ends(120.0, 1, 0.015)
