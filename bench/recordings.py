"""Recordings made for the bench, in a folder that is cleared at the end."""

import contextlib
import shutil
import tempfile
import wave
from collections.abc import Iterator
from pathlib import Path

import numpy as np

RATE = 8000


def two_channels(seconds: float, seed: int = 2) -> np.ndarray:
    """A supply and a cut current with a little noise, (2, n)."""
    t = np.arange(int(seconds * RATE)) / RATE
    phase = 2.0 * np.pi * 50.013 * t
    cut = np.where(np.mod(phase, np.pi) >= 1.2, np.sin(phase), 0.0)
    noise = 1e-3 * np.random.default_rng(seed).standard_normal((2, len(t)))
    return np.stack((325.0 * (np.sin(phase) + noise[0]), 10.0 * (cut + noise[1])))


@contextlib.contextmanager
def folder() -> Iterator[Path]:
    """A folder for big files."""
    path = Path(tempfile.mkdtemp(prefix="bench"))
    try:
        yield path
    finally:
        shutil.rmtree(path)


def write(path: Path, samples: np.ndarray) -> None:
    """Write samples in the kind that the name says."""
    if path.suffix == ".npz":
        np.savez(path, samples=samples, rate=float(RATE), names=["U", "I"], units=["V", "A"])
    elif path.suffix == ".wav":
        scale = np.array([[400.0], [20.0]]) / 32768.0
        with wave.open(str(path), "wb") as out:
            out.setnchannels(2)
            out.setsampwidth(2)
            out.setframerate(RATE)
            out.writeframes(
                np.ascontiguousarray(np.rint(samples / scale).astype("<i2").T).tobytes()
            )
    else:
        table = np.column_stack((np.arange(samples.shape[1]) / RATE, samples.T))
        np.savetxt(path, table, "%.6f", ",", header="time [s],U [V],I [A]", comments="")
