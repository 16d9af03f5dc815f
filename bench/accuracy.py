"""How true the numbers are: worst case over random band-limited waves, against closed forms."""

import numpy as np

from bench.figure import Figure, at_most, report
from dsp.measure import measure
from dsp.waveform import Channel, Kind, Waveform
from dsp.windowing import Windower

RATES = (4000.0, 8000.0, 12800.0)
WAVES = 60  # random waves for each rate


def run() -> bool:
    """Print the figures."""
    rng = np.random.default_rng(20)
    float_rms, float_thd, coded = [], [], {12: [], 10: []}
    sine_arv = []
    for rate in RATES:
        for _ in range(WAVES):
            wave = _Wave.random(rng, rate)
            rms, thd, _ = _measured(wave.samples, rate, wave.nominal)
            float_rms.append(abs(rms / wave.rms - 1.0))
            float_thd.append(abs(thd - wave.thd))
            full = 1.2 * float(np.max(np.abs(wave.samples)))
            for bits, errors in coded.items():
                step = 2.0 * full / 2**bits
                errors.append(
                    abs(
                        _measured(np.round(wave.samples / step) * step, rate, wave.nominal)[0]
                        / wave.rms
                        - 1.0
                    )
                )
            f = wave.nominal + rng.uniform(-0.5, 0.5)
            n = np.arange(int(2.0 * rate))
            sine = np.sin(2.0 * np.pi * f * n / rate + rng.uniform(0.0, 6.28))
            sine_arv.append(abs(_measured(sine, rate, wave.nominal)[2] / (2.0 / np.pi) - 1.0))
    figures: list[Figure] = [
        at_most(
            "RMS, float samples, worst", 1e6 * max(float_rms), "ppm", 1.0, f"{len(float_rms)} waves"
        ),
        at_most("THD-F, float samples, worst", 100.0 * max(float_thd), "percentage points", 0.01),
        at_most("RMS, 12 bits, worst", 1e6 * max(coded[12]), "ppm", 60.0),
        at_most("RMS, 10 bits, worst", 1e6 * max(coded[10]), "ppm", 200.0),
        at_most("ARV of a sine, worst", 1e6 * max(sine_arv), "ppm", 20.0),
    ]
    return report("Accuracy on band-limited waves at 4, 8 and 12.8 kS/s", figures)


class _Wave:
    """A sum of harmonics that stays under 0.4 of the rate; RMS and THD known in closed form."""

    def __init__(self, samples: np.ndarray, rms: float, thd: float, nominal: float) -> None:
        self.samples, self.rms, self.thd, self.nominal = samples, rms, thd, nominal

    @classmethod
    def random(cls, rng: np.random.Generator, rate: float) -> "_Wave":
        nominal = float(rng.choice((50.0, 60.0)))
        f = nominal + rng.uniform(-0.5, 0.5)
        orders = np.arange(1, min(50, int(0.4 * rate / f)) + 1)
        amplitudes = np.where(orders == 1, 1.0, rng.uniform(0.0, 0.5, len(orders)) / orders)
        phases = rng.uniform(0.0, 2.0 * np.pi, len(orders))
        t = np.arange(int(2.0 * rate)) / rate
        samples = (
            amplitudes[:, None] * np.sin(2.0 * np.pi * f * orders[:, None] * t + phases[:, None])
        ).sum(0)
        rms = float(np.sqrt(np.sum(amplitudes**2) / 2.0))
        return cls(samples, rms, float(np.sqrt(np.sum(amplitudes[1:] ** 2))), nominal)


def _measured(samples: np.ndarray, rate: float, nominal: float) -> tuple[float, float, float]:
    """RMS, THD-F and ARV of the third window, clear of both ends."""
    channel = Channel("x", "V", Kind.VOLTAGE)
    windower = Windower(1, 0, nominal)
    runs = windower.feed(Waveform(samples[None, :], rate, 0)) + windower.flush()
    readings = measure(runs[0], [channel], nominal)
    cell = readings.cell(2, 0)
    return cell.rms, cell.thd_f, cell.arv
