"""Waves given to the windower and measured, as the engine does it."""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pytest

from dsp.measure import measure
from dsp.reading import Readings
from dsp.waveform import Channel, Kind, Waveform
from dsp.window import Flag, Lock, Windows
from dsp.windowing import Windower

Floats = npt.NDArray[np.float64]


@pytest.fixture
def windows_of() -> Callable[..., list[Windows]]:
    def _windows_of(
        samples: np.ndarray, rate: float, nominal: float | None = None, chunk: int | None = None,
        reference: int = 0,
    ) -> list[Windows]:  # fmt: skip
        samples = np.atleast_2d(np.asarray(samples, float))
        windower = Windower(len(samples), reference, nominal)
        runs: list[Windows] = []
        chunk = chunk or samples.shape[1]
        for at in range(0, samples.shape[1], chunk):
            runs += windower.feed(Waveform(samples[:, at : at + chunk].copy(), rate, at))
        return runs + windower.flush()

    return _windows_of


@pytest.fixture
def readings_of(windows_of: Callable[..., list[Windows]]) -> Callable[..., list[Readings]]:
    def _readings_of(
        samples: np.ndarray, rate: float, nominal: float | None = None, **channel: float
    ) -> list[Readings]:
        samples = np.atleast_2d(np.asarray(samples, float))
        channels = [
            Channel(f"c{k}", "V", Kind.VOLTAGE, **channel)  # type: ignore[arg-type]
            for k in range(len(samples))
        ]
        return [measure(run, channels, nominal) for run in windows_of(samples, rate, nominal)]

    return _readings_of


@dataclass
class Cut:
    """All windows of a stream in columns, and the runs they came in."""

    runs: list[Windows]

    def column(self, name: str) -> Floats:
        parts = [np.asarray(getattr(run, name), float) for run in self.runs]
        return np.concatenate(parts) if parts else np.empty(0)

    @property
    def locks(self) -> list[Lock]:
        return [lock for run in self.runs for lock in run.locks]

    @property
    def flags(self) -> list[Flag]:
        return [Flag(int(flag)) for run in self.runs for flag in run.flags]

    def __len__(self) -> int:
        return len(self.locks)


@dataclass
class Measured:
    """Readings of a stream in columns (w, c)."""

    cut: Cut
    readings: list[Readings]

    def column(self, name: str) -> Floats:
        return np.concatenate([getattr(r, name) for r in self.readings])

    def u(self, name: str) -> Floats:
        return np.concatenate([r.u[name] for r in self.readings])


def _cut(
    x: npt.ArrayLike,
    rate: float,
    sizes: Iterable[int] | int | None = None,
    nominal: float | None = None,
    reference: int = 0,
) -> Cut:
    samples = np.atleast_2d(np.asarray(x, float))
    n = samples.shape[1]
    if sizes is None:
        sizes = n
    if isinstance(sizes, int):
        sizes = [sizes] * (n // sizes + 1)
    windower = Windower(len(samples), reference, nominal)
    runs: list[Windows] = []
    at = 0
    for size in sizes:
        if at >= n:
            break
        runs += windower.feed(Waveform(samples[:, at : at + size].copy(), rate, at))
        at += size
    return Cut(runs + windower.flush())


@pytest.fixture(scope="session")
def cut() -> Callable[..., Cut]:
    return _cut


@pytest.fixture(scope="session")
def measured() -> Callable[..., Measured]:
    def work(
        x: npt.ArrayLike,
        rate: float,
        channels: Sequence[Channel] | None = None,
        **options: object,
    ) -> Measured:
        found = _cut(x, rate, **options)  # type: ignore[arg-type]
        rows = len(np.atleast_2d(np.asarray(x)))
        given = channels or [Channel(f"ch{k + 1}", "V", Kind.VOLTAGE) for k in range(rows)]
        return Measured(found, [measure(run, given) for run in found.runs])

    return work
