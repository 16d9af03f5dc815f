"""Invented circuits. A scene says what flows at any time and knows its closed-form truth.

Times in seconds from the scene's start; values in V and A. What varies does so slowly enough that
within one 0.2 s window the truth at its middle holds, except while a cue fades or a motor starts.
"""

import difflib
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt

from sim import truths, waveforms
from sim.errors import UnknownScene
from sim.truths import Truth

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class SceneChannel:
    """One measured place. The front end's range is `full_scale` either way."""

    name: str
    unit: str
    full_scale: float


class Scene(Protocol):
    """An invented circuit."""

    name: str
    title: str
    description: str
    nominal: float  # Hz
    channels: tuple[SceneChannel, ...]

    def at(self, t: Floats) -> Floats:
        """True values (channels, n) at times t (n,)."""
        ...

    def truth(self, t: float) -> tuple[Truth | None, ...]:
        """Closed form per channel about time t; None while something changes there."""
        ...


@dataclass(frozen=True, slots=True)
class _Cue:
    """Fade to a firing angle, then hold it."""

    fade: float  # s
    hold: float  # s
    degrees: float


class Hall:
    """The stage rack of the Millbrook community hall through an evening."""

    name = "hall"
    title = "Stage rack, Millbrook community hall"
    description = (
        "Phase-cut ways follow the evening's cues; the supply, one way's voltage and current, and "
        "a neutral that carries the triplens of all three phases."
    )
    nominal = 50.0
    channels: tuple[SceneChannel, ...] = (
        SceneChannel("supply", "V", 400.0),
        SceneChannel("way 7 V", "V", 400.0),
        SceneChannel("way 7 A", "A", 20.0),
        SceneChannel("neutral", "A", 25.0),
    )
    supply = 230.4  # V
    full_current = 8.7  # A rms of a way's load at full
    frequency = 49.985  # Hz
    # An evening in small: house preset, overture, a dark scene, a storm, curtain, repeat.
    cues = (
        _Cue(0.0, 9.0, 62.0),
        _Cue(3.0, 9.0, 104.0),
        _Cue(2.0, 8.0, 131.0),
        _Cue(1.0, 8.0, 90.0),
        _Cue(4.0, 10.0, 28.0),
        _Cue(5.0, 8.0, 0.0),
        _Cue(4.0, 9.0, 118.0),
        _Cue(3.0, 0.0, 62.0),
    )

    def __init__(self) -> None:
        times, angles = [0.0], [math.radians(self.cues[0].degrees)]
        for cue in self.cues:
            for length in (cue.fade, cue.hold):
                times.append(times[-1] + length)
                angles.append(math.radians(cue.degrees))
        self._times = np.array(times)
        self._angles = np.array(angles)
        self.period = times[-1]

    def at(self, t: Floats) -> Floats:
        """See Scene."""
        phase = 2.0 * np.pi * self.frequency * t
        peak = math.sqrt(2.0)
        supply = peak * self.supply * np.sin(phase)
        way = waveforms.leading_cut(phase, self._angle_of_half_cycle(phase))
        neutral = np.zeros_like(t)
        for shift in (0.0, -2.0 * np.pi / 3.0, 2.0 * np.pi / 3.0):
            turned = phase + shift
            neutral += waveforms.leading_cut(turned, self._angle_of_half_cycle(turned))
        load = peak * self.full_current
        return np.stack((supply, peak * self.supply * way, load * way, load * neutral))

    def truth(self, t: float) -> tuple[Truth | None, ...]:
        """See Scene."""
        supply = truths.sine(self.supply)
        t = math.fmod(t, self.period)
        k = int(np.searchsorted(self._times, t, side="right")) - 1
        if self._angles[k] != self._angles[min(k + 1, len(self._angles) - 1)]:
            return (supply, None, None, None)
        angle = float(self._angles[k])
        neutral = truths.neutral_of_three(self.full_current, angle)
        return (
            supply,
            truths.phase_cut(self.supply, angle),
            truths.phase_cut(self.full_current, angle),
            Truth(neutral, math.nan, math.nan),
        )

    def _angle_of_half_cycle(self, phase: Floats) -> Floats:
        """A dimmer decides at the zero crossing and keeps its angle for the half-cycle."""
        begun = np.floor(phase / np.pi) * np.pi / (2.0 * np.pi * self.frequency)
        return np.asarray(np.interp(np.mod(begun, self.period), self._times, self._angles))


class Workshop:
    """A workshop with battery chargers and a compressor."""

    name = "workshop"
    title = "Workshop bay, Harrow Lane joinery"
    description = (
        "Chargers draw short current pulses all day; every minute and a half a compressor starts, "
        "takes six times its running current for a moment and pulls the supply down."
    )
    nominal = 50.0
    channels: tuple[SceneChannel, ...] = (
        SceneChannel("bench supply", "V", 400.0),
        SceneChannel("feeder", "A", 90.0),
    )
    supply = 231.0  # V
    frequency = 50.02  # Hz
    pulse_peak = 14.0  # A
    pulse_width = math.radians(62.0)
    running = 6.5  # A rms of the compressor
    first_start, every, runs_for = 12.0, 90.0, 25.0  # s
    start_lasts = 0.42  # s of inrush
    sag = 0.17  # of the supply while the motor starts

    def at(self, t: Floats) -> Floats:
        """See Scene."""
        phase = 2.0 * np.pi * self.frequency * t
        since = np.mod(t - self.first_start, self.every)
        begun = t >= self.first_start
        starting = begun & (since < self.start_lasts)
        running = begun & (since < self.runs_for)
        level = np.where(starting, 1.0 - self.sag, np.where(running, 0.992, 1.0))
        voltage = math.sqrt(2.0) * self.supply * level * np.sin(phase)
        chargers = self.pulse_peak * waveforms.charging_pulses(phase, self.pulse_width)
        draw = np.where(starting, 6.0, np.where(running, 1.0, 0.0))
        lag = np.where(starting, math.radians(68.0), math.radians(31.0))
        motor = math.sqrt(2.0) * self.running * draw * np.sin(phase - lag)
        return np.stack((voltage, chargers + motor))

    def truth(self, t: float) -> tuple[Truth | None, ...]:
        """See Scene."""
        since = math.fmod(t - self.first_start, self.every) if t >= self.first_start else math.inf
        if since < self.start_lasts + 0.1:
            return (None, None)
        if since < self.runs_for + 0.1:
            return (truths.sine(0.992 * self.supply), None)
        return (
            truths.sine(self.supply),
            truths.charging_pulses(self.pulse_peak, self.pulse_width),
        )


class Clean:
    """A clean supply on a heater: both kinds of meter agree."""

    name = "clean"
    title = "Clean supply, drying cabinet"
    description = "A plain sine into a plain resistor. Every kind of meter shows the same."
    nominal = 50.0
    channels: tuple[SceneChannel, ...] = (
        SceneChannel("supply", "V", 400.0),
        SceneChannel("heater", "A", 20.0),
    )
    supply = 229.6  # V
    current = 6.4  # A
    frequency = 50.01  # Hz

    def at(self, t: Floats) -> Floats:
        """See Scene."""
        wave = math.sqrt(2.0) * np.sin(2.0 * np.pi * self.frequency * t)
        return np.stack((self.supply * wave, self.current * wave))

    def truth(self, t: float) -> tuple[Truth | None, ...]:
        """See Scene."""
        return (truths.sine(self.supply), truths.sine(self.current))


class PumpHouse:
    """A pump house at the end of a long cable, 60 Hz."""

    name = "pump"
    title = "Pump house on a long cable, Tarn Bridge"
    description = (
        "A six-pulse drive at the far end of a long cable: blocky current, and a supply that sags "
        "with it as the pump works against its valve."
    )
    nominal = 60.0
    channels: tuple[SceneChannel, ...] = (
        SceneChannel("cable end", "V", 250.0),
        SceneChannel("drive", "A", 60.0),
    )
    supply = 118.5  # V
    frequency = 60.01  # Hz
    block = 24.0  # A
    stroke = 7.0  # s
    depth = 0.04

    def at(self, t: Floats) -> Floats:
        """See Scene."""
        phase = 2.0 * np.pi * self.frequency * t
        work = 0.5 - 0.5 * np.cos(2.0 * np.pi * t / self.stroke)
        voltage = math.sqrt(2.0) * self.supply * (1.0 - self.depth * work) * np.sin(phase)
        current = self.block * (0.6 + 0.4 * work) * waveforms.six_pulse(phase - math.radians(22.0))
        return np.stack((voltage, current))

    def truth(self, t: float) -> tuple[Truth | None, ...]:
        """See Scene."""
        work = 0.5 - 0.5 * math.cos(2.0 * math.pi * t / self.stroke)
        return (
            truths.sine(self.supply * (1.0 - self.depth * work)),
            truths.six_pulse(self.block * (0.6 + 0.4 * work)),
        )


SCENES: Mapping[str, Callable[[], Scene]] = {
    "hall": Hall,
    "workshop": Workshop,
    "pump": PumpHouse,
    "clean": Clean,
}


def find(name: str) -> Scene:
    """The scene of that name.

    Raises:
        UnknownScene: there is none; the message names a near one.
    """
    if name in SCENES:
        return SCENES[name]()
    shown = "".join(c if c.isprintable() else " " for c in name[:40])
    error = UnknownScene(f"there is no scene {shown!r}")
    near = difflib.get_close_matches(name, SCENES, 1)
    error.add_note(f"did you mean {near[0]}?" if near else f"the scenes are {', '.join(SCENES)}")
    raise error
