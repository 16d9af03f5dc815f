"""WAV and FLAC against three independent readers: the stdlib's wave, scipy and libsndfile."""

import struct
import sys
import wave

import numpy as np
import pytest
import scipy.io.wavfile
import soundfile

from acquisition.errors import RecordingDamaged, RecordingRefused
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import RecordingOptions

RATE = 8000
WAVES = np.stack(
    [0.7 * np.sin(0.0393 * np.arange(70001)), 0.2 * np.cos(0.0393 * np.arange(70001) - 0.3)]
)


def read(path, **options):
    recording = open_recording(path, RecordingOptions(**options))
    blocks = list(recording.blocks())
    assert recording.bytes_read() == recording.bytes_total
    recording.close()
    return recording.info, np.concatenate([b.codes for b in blocks], axis=1)


def values(info, codes):
    gain = np.array([[1.0 if c.gain is None else c.gain] for c in info.channels])
    offset = np.array([[c.offset_codes] for c in info.channels])
    return gain * (codes + offset)


@pytest.mark.parametrize("kind", ["PCM_U8", "PCM_16", "PCM_24", "PCM_32", "FLOAT", "DOUBLE"])
@pytest.mark.parametrize("form", ["WAV", "WAVEX", "RF64"])
def test_every_kind_of_wav_is_read_as_libsndfile_reads_it(tmp_path, kind, form):
    path = tmp_path / "x.wav"
    soundfile.write(path, WAVES.T, RATE, subtype=kind, format=form)
    info, codes = read(path, scale={"ch1": 1.0, "ch2": 1.0})
    expected, _ = soundfile.read(path, always_2d=True)
    assert np.array_equal(values(info, codes), expected.T)
    assert info.rate == RATE
    assert [c.name for c in info.channels] == ["ch1", "ch2"]


@pytest.mark.parametrize("kind", ["PCM_S8", "PCM_16", "PCM_24"])
def test_every_kind_of_flac_is_read_as_libsndfile_reads_it(tmp_path, kind):
    path = tmp_path / "x.flac"
    soundfile.write(path, WAVES.T, RATE, subtype=kind)
    info, codes = read(path, scale={"ch1": 1.0, "ch2": 1.0})
    expected, _ = soundfile.read(path, always_2d=True)
    assert np.array_equal(values(info, codes), expected.T)
    low, high = info.channels[0].rails
    assert low <= codes.min()
    assert high >= codes.max()


@pytest.mark.parametrize("dtype", [np.uint8, np.int16, np.int32, np.float32])
def test_codes_are_those_that_scipy_reads(tmp_path, dtype):
    path = tmp_path / "x.wav"
    half = 127 if dtype == np.uint8 else 1 if dtype == np.float32 else np.iinfo(dtype).max
    samples = (WAVES.T * half + (128 if dtype == np.uint8 else 0)).astype(dtype)
    scipy.io.wavfile.write(path, RATE, samples)
    _, codes = read(path)
    assert np.array_equal(codes, scipy.io.wavfile.read(path)[1].T)


def test_full_scale_is_what_the_person_says(tmp_path):
    path = tmp_path / "x.wav"
    with wave.open(str(path), "wb") as out:
        out.setparams((1, 2, RATE, 0, "NONE", ""))
        out.writeframes(np.array([-32768, 0, 16384, 32767], "<i2").tobytes())
    info, codes = read(path, scale={"ch1": 400.0})
    assert values(info, codes)[0].tolist() == [-400.0, 0.0, 200.0, 32767 * 400.0 / 32768]
    assert info.channels[0].rails == (-32768, 32767)
    info, codes = read(path)
    assert info.channels[0].gain is None  # counts
    assert codes.tolist() == [[-32768, 0, 16384, 32767]]


def test_a_float_that_is_no_number_is_a_gap(tmp_path):
    samples = WAVES[0, :900].astype(np.float32)
    samples[300:305] = np.nan
    scipy.io.wavfile.write(tmp_path / "x.wav", RATE, samples)
    blocks = list(open_recording(tmp_path / "x.wav", RecordingOptions()).blocks())
    assert [(b.index, b.sets, b.lost_before) for b in blocks] == [(0, 300, 0), (305, 595, 5)]


def pcm(declared=None, samples=b"\1\0" * 100, tag=1, channels=1, rate=RATE, bits=16, align=None):
    align = channels * bits // 8 if align is None else align
    fmt = struct.pack("<HHIIHH", tag, channels, rate, rate * align, align, bits)
    size = len(samples) if declared is None else declared
    return (
        struct.pack("<4sI4s4sI", b"RIFF", 36 + len(samples), b"WAVE", b"fmt ", 16)
        + fmt
        + struct.pack("<4sI", b"data", size)
        + samples
    )


def test_what_a_cut_file_holds_is_read_and_then_said_to_be_cut(tmp_path):
    path = tmp_path / "cut.wav"
    path.write_bytes(pcm(declared=960_000))
    recording = open_recording(path, RecordingOptions())
    assert any("cut short" in note for note in recording.info.notes)
    found = []
    with pytest.raises(RecordingDamaged, match="promises 480000 sets, it holds 100"):
        for block in recording.blocks():
            found.append(block.sets)
    assert found == [100]


@pytest.mark.parametrize("declared", [0, 0xFFFFFFFF])
def test_a_recorder_that_was_killed_leaves_no_length(tmp_path, declared):
    path = tmp_path / "killed.wav"
    path.write_bytes(pcm(declared=declared))
    info, codes = read(path)
    assert codes.shape == (1, 100)
    assert any("does not say how long" in note for note in info.notes)


# sentence: (content, what the refusal says)
REFUSED = {
    "a header and nothing else": (pcm()[:40], "ends inside its header"),
    "no samples": (pcm(samples=b""), "holds no samples"),
    "compressed": (pcm(tag=85), "holds MP3"),
    "another compression": (pcm(tag=0x1234), "format 4660"),
    "12 channels of nothing": (pcm(channels=0, align=2), "claims 0 channels .byte 22"),
    "too many channels": (pcm(channels=9000, align=18000), "claims 9000 channels"),
    "no rate": (pcm(rate=0), "rate of 0 .byte 24"),
    "a contradiction": (pcm(align=3), "contradicts itself .byte 32"),
    "64 bits of integers": (pcm(bits=64), "64 bits a sample .byte 34"),
    "samples before the format": (pcm()[:12] + pcm()[36:], "before the format .byte 12"),
    "big-endian": (b"RIFX" + pcm()[4:], "big-endian"),
    "no WAVE": (b"RIFF\0\0\0\0AVI LIST" + bytes(50), "does not begin as a WAV"),
    "a name only": (b"hello world, not sound", "named as WAV but begins with the text 'hello"),
}


@pytest.mark.parametrize("sentence", REFUSED)
def test_what_is_no_plain_wav_is_refused(tmp_path, sentence):
    content, said = REFUSED[sentence]
    path = tmp_path / "x.wav"
    path.write_bytes(content)
    with pytest.raises(RecordingRefused, match=said) as refusal:
        open_recording(path, RecordingOptions())
    assert "x.wav" in str(refusal.value)
    assert refusal.value.__notes__


def test_a_scale_for_no_channel_is_refused(tmp_path):
    path = tmp_path / "x.wav"
    path.write_bytes(pcm())
    with pytest.raises(RecordingRefused, match=r"--scale names ch7.*x\.wav"):
        open_recording(path, RecordingOptions(scale={"ch7": 1.0}))


def test_flac_without_its_package_says_what_to_install(tmp_path, monkeypatch):
    path = tmp_path / "x.flac"
    soundfile.write(path, WAVES.T, RATE)
    monkeypatch.setitem(sys.modules, "soundfile", None)
    with pytest.raises(RecordingRefused, match="needs the soundfile package") as refusal:
        open_recording(path, RecordingOptions())
    assert "crestwatch[sound]" in refusal.value.__notes__[0]


def test_a_cut_flac_ends_in_a_sentence(tmp_path):
    path = tmp_path / "x.flac"
    soundfile.write(path, np.random.default_rng(3).uniform(-0.5, 0.5, 200_000), RATE)
    whole = path.read_bytes()
    for keep in (8, 60, len(whole) // 2, len(whole) - 100):
        path.write_bytes(whole[:keep])
        with pytest.raises((RecordingRefused, RecordingDamaged), match=r"x\.flac"):
            list(open_recording(path, RecordingOptions()).blocks())
