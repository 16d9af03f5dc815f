"""Values on the command line: read as a person writes them, refused with the reason."""

import argparse
import math

import pytest

from crestwatch import arguments

LENGTHS = {"10": 10.0, "10s": 10.0, "500ms": 0.5, "5min": 300.0, "8h": 28800.0, "1.5 h": 5400.0}


@pytest.mark.parametrize("text", LENGTHS)
def test_lengths_of_time(text: str) -> None:
    assert arguments.seconds(text) == pytest.approx(LENGTHS[text], rel=1e-12)


@pytest.mark.parametrize("text", ["", "0", "-3s", "3 days", "s", "1e3s", "nan"])
def test_no_length_of_time(text: str) -> None:
    with pytest.raises(argparse.ArgumentTypeError, match="length of time"):
        arguments.seconds(text)


@pytest.mark.parametrize(
    ("text", "expected"),
    [("ch1=400", ("ch1", (400.0, ""))), ("way 3=12.5A", ("way 3", (12.5, "A")))],
)
def test_scales(text: str, expected: tuple[str, float]) -> None:
    assert arguments.scale(text) == expected


@pytest.mark.parametrize("text", ["ch1", "=4", "ch1=", "ch1=0", "ch1=nan", "ch1=four", "ch1=1e999"])
def test_no_scale(text: str) -> None:
    with pytest.raises(argparse.ArgumentTypeError, match="CHANNEL=UNITS"):
        arguments.scale(text)


@pytest.mark.parametrize("text", ["0", "-1", "nan", "inf", "ten"])
def test_not_positive(text: str) -> None:
    with pytest.raises(argparse.ArgumentTypeError):
        arguments.positive(text)
    assert math.isfinite(arguments.positive("0.5"))
