"""Waves given to the windower and measured, as the engine does it."""

from collections.abc import Callable

import numpy as np
import pytest

from dsp.measure import measure
from dsp.reading import Readings
from dsp.waveform import Channel, Kind, Waveform
from dsp.window import Windows
from dsp.windowing import Windower


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
