"""The simulated logger: frames read by a small decoder of the test's own, faults by the account."""

import contextlib
import struct
import zlib
from collections.abc import Iterator

import numpy as np
import pytest
from cobs import cobs
from hypothesis import given, settings
from hypothesis import strategies as st

from sim.device import Account, LoggerSpec, frames
from sim.errors import FaultError, SimError, UnknownScene
from sim.faults import Faults, damage, parse
from sim.scenes import find


def _bodies(data: bytes) -> Iterator[bytes]:
    """Bodies with a good CRC-32, by the format's grammar: 00 COBS(body + CRC) 00."""
    for unit in data.split(b"\0"):
        if not unit:
            continue
        try:
            raw = cobs.decode(unit)
        except cobs.DecodeError:
            continue
        if len(raw) >= 22 and zlib.crc32(raw[:-4]) == struct.unpack("<I", raw[-4:])[0]:
            yield raw[:-4]


def _taken(spec: LoggerSpec, seconds: float, account: Account | None = None) -> tuple[float, bytes]:
    out = b""
    for due, piece in frames(spec, account):
        if due > seconds:
            return due, out
        out += piece
    raise AssertionError("it is endless")


def _sets(data: bytes) -> list[tuple[int, int, np.ndarray]]:
    """(boot, index, codes) of every DATA frame."""
    out = []
    for body in _bodies(data):
        kind, boot, _, index, _, channels, sample, _, _, count = struct.unpack(
            "<BBHIIBBBBH", body[:18]
        )
        if kind == 0x11:
            assert sample == 1
            codes = np.frombuffer(body[18:], "<u2").reshape(count, channels).T
            out.append((boot, index, codes))
    return out


def test_frames_hold_the_scene_and_count_every_set():
    spec = LoggerSpec(find("clean"), noise_codes=0.0)
    _, data = _taken(spec, 1.0)
    found = _sets(data)
    codes = np.concatenate([c for _, _, c in found], axis=1)
    assert [i for _, i, _ in found] == list(range(0, codes.shape[1], 64))
    t = np.arange(codes.shape[1]) / 8000.0
    true = spec.scene.at(t)
    # 12 bits over 400 V either way: half a code of rounding.
    volts = (codes[0].astype(float) - 2048) * 400.0 / 2048
    assert np.max(np.abs(volts - true[0])) <= 0.5 * 400.0 / 2048 + 1e-9


def test_quantisation_and_noise_have_their_statistics():
    """Rounding error is rectangular, 1/sqrt(12) of a code; noise adds in squares (closed form)."""
    spec = LoggerSpec(find("clean"), noise_codes=2.0)
    _, data = _taken(spec, 2.0)
    codes = np.concatenate([c for _, _, c in _sets(data)], axis=1)
    t = np.arange(codes.shape[1]) / 8000.0
    error = codes[0] - (spec.scene.at(t)[0] / 400.0 * 2048 + 2048)
    assert float(np.std(error)) == pytest.approx(np.sqrt(4.0 + 1.0 / 12.0), rel=0.03)


def test_the_same_seed_gives_the_same_bytes_and_another_does_not():
    first = _taken(LoggerSpec(find("hall"), seed=5), 0.5)
    assert first == _taken(LoggerSpec(find("hall"), seed=5), 0.5)
    assert first != _taken(LoggerSpec(find("hall"), seed=6), 0.5)


def test_a_fast_clock_is_early():
    slow = LoggerSpec(find("clean"), clock_ppm=0.0)
    fast = LoggerSpec(find("clean"), clock_ppm=500.0)

    def tenth(spec):
        made = frames(spec)
        return [next(made)[0] for _ in range(1000)][-1]

    assert tenth(slow) / tenth(fast) == pytest.approx(1.0005, rel=1e-6)


def test_hello_comes_first_and_every_second():
    _, data = _taken(LoggerSpec(find("hall")), 3.5)
    kinds = [body[0] for body in _bodies(data)]
    assert kinds[0] == 0x10
    assert kinds.count(0x10) == 4


def test_text_and_raw_hold_the_same_codes():
    base = {"scene": find("clean"), "rate": 2000.0, "sets_per_frame": 32, "noise_codes": 0.0}
    _, framed = _taken(LoggerSpec(format="crestwire", **base), 0.5)
    _, text = _taken(LoggerSpec(format="text", **base), 0.5)
    _, raw = _taken(LoggerSpec(format="raw", **base), 0.5)
    codes = np.concatenate([c for _, _, c in _sets(framed)], axis=1)
    lines = np.array([[int(n) for n in line.split(",")] for line in text.decode().split()])
    assert np.array_equal(codes.T, lines)
    assert np.array_equal(codes.T, np.frombuffer(raw, "<u2").reshape(-1, 2))


def test_reboots_and_discards_are_in_the_account():
    account = Account()
    spec = LoggerSpec(find("clean"), faults=parse("reboot=3s,discard=1.3"))
    _, data = _taken(spec, 11.5, account)
    found = _sets(data)
    assert account.boots == 4  # one at the start, one at 3, 6 and 9 s
    assert len({boot for boot, _, _ in found}) == 4
    assert account.discarded > 0
    # Each boot counts its sets from 0: last index + count = sent + discarded.
    spanned = 0
    for boot in {b for b, _, _ in found}:
        own = [(i, c.shape[1]) for b, i, c in found if b == boot]
        spanned += own[-1][0] + own[-1][1]
    received = sum(c.shape[1] for _, _, c in found)
    assert spanned - received <= account.discarded
    assert spanned - received >= account.discarded - 300  # the last throw may await its next frame


def test_damage_is_as_frequent_as_asked():
    data = bytes(200_000)
    rng = np.random.default_rng(1)
    assert len(damage(data, Faults(drop=0.01), rng)) == pytest.approx(198_000, abs=200)
    assert len(damage(data, Faults(repeat=0.01), rng)) == pytest.approx(202_000, abs=200)
    flipped = damage(data, Faults(flip=0.01), rng)
    assert sum(b.bit_count() for b in flipped) == pytest.approx(2000, abs=200)
    assert damage(data, Faults(), rng) is data


@pytest.mark.parametrize(
    "text", ["dropp=1e-4", "drop", "drop=2", "drop=x", "reboot=-1", "flip=nan"]
)
def test_a_fault_that_does_not_read_is_refused_with_advice(text):
    with pytest.raises(FaultError) as caught:
        parse(text)
    assert caught.value.__notes__


@settings(deadline=None)
@given(st.text(max_size=40))
def test_any_fault_list_reads_or_is_refused(text):
    with contextlib.suppress(FaultError):
        assert isinstance(parse(text), Faults)


def test_an_unknown_scene_names_a_near_one():
    with pytest.raises(UnknownScene) as caught:
        find("hal")
    assert "hall" in caught.value.__notes__[0]


@pytest.mark.parametrize(
    "wrong", [{"rate": 1.0}, {"bits": 40}, {"format": "morse"}, {"noise_codes": -1.0}]
)
def test_a_logger_that_cannot_be_built_is_refused(wrong):
    with pytest.raises(SimError):
        frames(LoggerSpec(find("clean"), **wrong))
