"""NPZ and NPY: what numpy wrote comes back; what lies or is dangerous is refused."""

import io
import zipfile

import numpy as np
import pytest

from acquisition.errors import RecordingRefused
from acquisition.recordings.open import open_recording
from acquisition.recordings.recording import RecordingOptions

SAMPLES = np.random.default_rng(8).normal(size=(2, 150_000)).round(6)


def read(path, **options):
    recording = open_recording(path, RecordingOptions(**options))
    blocks = list(recording.blocks())
    recording.close()
    return recording.info, blocks, np.concatenate([b.codes for b in blocks], axis=1)


@pytest.mark.parametrize("save", [np.savez, np.savez_compressed])
@pytest.mark.parametrize("dtype", ["<f8", ">f8", "<f4", "<f2", "<i2", ">i4", "u1", "<i8"])
@pytest.mark.parametrize("order", ["C", "F"])
def test_what_numpy_wrote_comes_back(tmp_path, save, dtype, order):
    scaled = SAMPLES if "f" in dtype else SAMPLES * 20.0 + 120.0
    samples = np.asarray(scaled.astype(dtype), order=order)
    save(tmp_path / "x.npz", samples=samples, rate=8000.37, names=["U", "I"], units=["V", "A"])
    info, blocks, codes = read(tmp_path / "x.npz")
    assert info.rate == 8000.37
    assert [(c.name, c.unit) for c in info.channels] == [("U", "V"), ("I", "A")]
    assert np.array_equal(codes, samples)
    assert codes.dtype.isnative
    assert len(blocks) > 1
    assert info.channels[0].step == (None if "f" in dtype else 1.0)


def test_one_channel_may_be_a_plain_list(tmp_path):
    np.save(tmp_path / "x.npy", SAMPLES[0])
    info, _, codes = read(tmp_path / "x.npy", rate=4000.0)
    assert np.array_equal(codes[0], SAMPLES[0])
    assert info.channels[0].name == "ch1"


def test_numbers_that_are_none_are_gaps(tmp_path):
    samples = SAMPLES.copy()
    samples[1, 100:103] = np.nan
    samples[0, 500] = np.inf
    np.savez(tmp_path / "x.npz", samples=samples, rate=8000)
    _, blocks, _ = read(tmp_path / "x.npz")
    assert [(b.index, b.lost_before) for b in blocks if b.gap_before] == [(103, 3), (501, 1)]


def npy(header, body=b""):
    text = header.encode()
    text += b" " * (-(len(text) + 11) % 64) + b"\n"
    return b"\x93NUMPY\x01\x00" + len(text).to_bytes(2, "little") + text + body


def zipped(**members):
    file = io.BytesIO()
    with zipfile.ZipFile(file, "w") as out:
        for name, content in members.items():
            out.writestr(f"{name}.npy", content)
    return file.getvalue()


def saved(**arrays):
    file = io.BytesIO()
    np.savez(file, **arrays)
    return file.getvalue()


LIE = npy("{'descr': '<f8', 'fortran_order': False, 'shape': (2, 5000000000000)}", bytes(800))
ONE = npy("{'descr': '<f8', 'fortran_order': False, 'shape': (1,)}", bytes(8))
NINE = npy("{'descr': '<f8', 'fortran_order': False, 'shape': (9,)}", bytes(8))
# sentence: (name, content, what the refusal says)
REFUSED = {
    "a header that promises 80 TB": ("x.npy", LIE, "promises 80000000000000 bytes.* 800 are there"),
    "the same in an archive": ("x.npz", zipped(samples=LIE), "promises 80000000000000 bytes"),
    "objects": (
        "x.npz",
        saved(samples=np.array([1, "a", None], dtype=object), rate=8000),
        "objects, which are not opened",
    ),
    "no samples": ("x.npz", saved(voltage=SAMPLES, rate=8000), "no array `samples`.*voltage"),
    "no rate": ("x.npz", saved(samples=SAMPLES), "sample rate"),
    "a bare array": ("x.npy", ONE, "sample rate"),
    "sets by channels": ("x.npz", saved(samples=SAMPLES.T, rate=8000), "150000 channels of 2"),
    "a rate that is none": ("x.npz", saved(samples=SAMPLES, rate=-3.0), "rate` is -3"),
    "two rates": ("x.npz", saved(samples=SAMPLES, rate=[1, 2]), "rate` is not one number"),
    "too many names": ("x.npz", saved(samples=SAMPLES, rate=8, names=["a"]), "names` has 1 .* 2"),
    "complex numbers": ("x.npz", saved(samples=SAMPLES * 1j, rate=8), "complex128"),
    "yes and no": ("x.npz", saved(samples=SAMPLES > 0, rate=8), "bool"),
    "three dimensions": ("x.npz", saved(samples=np.zeros((2, 3, 4)), rate=8), "2 × 3 × 4"),
    "nothing": ("x.npz", saved(samples=np.zeros((2, 0)), rate=8), "2 × 0"),
    "a cut archive": ("x.npz", saved(samples=SAMPLES, rate=8)[:5000], "x.npz is damaged"),
    "a cut array": ("x.npy", NINE, "72 bytes.* 8 are"),
    "a header that is code": ("x.npy", npy("__import__('os').system('true')"), "plain NumPy array"),
    "another archive": ("x.zip", saved(samples=SAMPLES, rate=8), "archive or a spreadsheet"),
}  # fmt: skip


@pytest.mark.parametrize("sentence", REFUSED)
def test_what_cannot_be_believed_is_refused(tmp_path, sentence):
    name, content, said = REFUSED[sentence]
    (tmp_path / name).write_bytes(content)
    with pytest.raises(RecordingRefused, match=said) as refusal:
        open_recording(tmp_path / name, RecordingOptions())
    assert name in str(refusal.value)
    assert refusal.value.__notes__
