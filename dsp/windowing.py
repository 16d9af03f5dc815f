"""Cuts a stream of Waveforms into windows of whole cycles, as far as there are cycles.

A fundamental is accepted only after two windows' worth of samples show one line of steady phase
and a fair share of the power; noise, DC and lone harmonics stay unlocked and are cut into fixed
times. A lock is held for a second through a dip, on the last frequency. What is decided depends
only on the samples, never on how they were sliced on the way here.
"""

import math

import numpy as np
import numpy.typing as npt

from dsp.edges import MARGIN
from dsp.frequency import HIGHEST, LOWEST, LineFit, PhaseTracker, acquire
from dsp.period import cycle_length
from dsp.waveform import Waveform
from dsp.window import Flag, Lock, Windows

Floats = npt.NDArray[np.float64]

FIXED_TIME = 0.2  # s, an unlocked window
HOLD_WINDOWS = 7  # windows without a fundamental until the lock is given up: 1.4 s
OTHER_CHANNELS_AFTER = 5  # unlocked windows until other channels are tried as reference: 1 s
KEEP_SHARE, KEEP_SCATTER = 0.002, 0.35
BROKEN_OFF = 0.5  # amplitude at a window's end over that within it
RETUNE = 0.01  # relative distance of frequency and tracker that calls for a new taper
RATE_JUMP = 0.005  # a rate that changes by more than this begins a new stretch


class Windower:
    """Feeds on Waveforms, gives runs of Windows."""

    def __init__(self, channels: int, reference: int = 0, nominal: float | None = None) -> None:
        """Cut `channels` channels by the cycles of channel `reference`.

        Args:
            nominal: mains frequency [Hz]; None: found out.
        """
        self.lock = Lock.SEARCHING
        self.frequency = math.nan
        self._channels = channels
        self._rate = 0.0
        self._preferred = reference
        self._reference = reference
        self._nominal = nominal
        self._restart(0, 0.0)
        self._pending_gap = False

    def feed(self, waveform: Waveform) -> list[Windows]:
        """Take samples in; give the windows that they complete."""
        runs: list[Windows] = []
        jumped = self._rate and abs(waveform.rate / self._rate - 1.0) > RATE_JUMP
        if waveform.gap_before or waveform.start != self._stop or jumped:
            if self._started:
                runs += self._leftover()
                self._pending_gap = True
            elif waveform.gap_before:
                self._pending_gap = True
            self._restart(waveform.start, waveform.rate)
        self._rate = waveform.rate
        self._append(waveform.samples)
        while (run := self._step()) is not None:
            runs.append(run)
        self._trim()
        return runs

    def flush(self) -> list[Windows]:
        """At the end: a stretch shorter than a window is measured over what cycles it holds."""
        runs: list[Windows] = []
        if self._started:
            runs = self._leftover()
            self._restart(self._stop, self._rate)
        return runs

    # -- the buffer -------------------------------------------------------------------------

    def _restart(self, start: int, rate: float) -> None:
        self._buffer = np.empty((self._channels, 0))
        self._spare = np.empty((self._channels, 0))
        self._first = start  # index of the buffer's first set
        self._stop = start
        self._origin = start  # of this contiguous stretch
        self._rate = rate
        self._tracker: PhaseTracker | None = None
        self._begin = float(start + MARGIN)  # where the next window begins
        self._cycles = 0
        self._failed = 0  # windows held without a fundamental
        self._unlocked = 0
        self._emitted = 0
        self._nu = math.nan
        self.lock = Lock.SEARCHING

    @property
    def _started(self) -> bool:
        return self._stop > self._origin

    def _append(self, samples: Floats) -> None:
        have = self._stop - self._first
        need = have + samples.shape[1]
        if need > self._spare.shape[1]:
            # A new array, so that windows already handed out keep theirs.
            grown = np.empty((self._channels, max(need, 2 * have, 4096)))
            grown[:, :have] = self._buffer
            self._spare = grown
        self._spare[:, have:need] = samples
        self._buffer = self._spare[:, :need]
        self._stop += samples.shape[1]

    def _trim(self) -> None:
        keep = math.floor(self._begin) - MARGIN - 1
        if self._tracker is not None:
            self._tracker.drop_before(self._begin - 2 * self._tracker.hop)
            keep = min(keep, self._tracker.next_sample())
            keep = min(keep, math.floor(self._begin) - 2 * self._tracker.length)
        else:
            keep -= math.ceil(0.1 * self._rate)
        spare = keep - self._first
        if spare > max(4096, (self._stop - self._first) // 2):
            self._spare = self._buffer[:, spare:].copy()
            self._buffer = self._spare
            self._first += spare

    # -- deciding ---------------------------------------------------------------------------

    def _step(self) -> Windows | None:
        """One decision: a run of windows, or None when more samples are needed."""
        if self._tracker is None:
            search = math.ceil(2.0 * FIXED_TIME * self._rate) + 2 * MARGIN
            reach = math.ceil(self._begin) + search + math.ceil(0.1 * self._rate)
            if self._stop < reach:
                return None
            if not self._acquire(reach):
                return self._fixed()
        return self._locked()

    def _acquire(self, reach: int) -> bool:
        """Try to find a fundamental in the samples from `begin` to `reach`."""
        candidates = [self._preferred]
        if self._unlocked >= OTHER_CHANNELS_AFTER:
            candidates += [c for c in range(self._channels) if c != self._preferred]
        at = max(self._origin, math.floor(self._begin) - MARGIN)
        return any(self._acquire_on(channel, at, reach, confirm=True) for channel in candidates)

    def _acquire_on(self, channel: int, at: int, reach: int, confirm: bool) -> bool:
        x = self._buffer[channel, at - self._first : reach - self._first]
        found = acquire(x, at, self._rate, confirm)
        if found is None:
            return False
        tracker, curve = found
        points = tracker.positions()
        self._reference = channel
        self._nu = curve.nu(float(points[0] + points[-1]) / 2.0)
        self._tracker = PhaseTracker(self._nu, at)
        self._tracker.extend(self._buffer[channel], self._first)
        self._set_cycles(self._nu * self._rate)
        self.lock = Lock.LOCKED
        self.frequency = self._nu * self._rate
        self._failed = self._unlocked = 0
        # Back along the parabola to the first upward zero crossing that has its margin.
        begin = np.array([self._begin])
        crossing = np.ceil((curve.phase(begin) + 0.5 * np.pi) / (2.0 * np.pi) - 1e-9)
        ahead = 2.0 * np.pi * crossing - 0.5 * np.pi
        near = begin + (ahead - curve.phase(begin)) / (2.0 * np.pi * curve.nu(self._begin))
        self._begin = max(self._begin, float(curve.reach(ahead, near)[0]))
        return True

    def _set_cycles(self, frequency: float) -> None:
        nominal = self._nominal or (50.0 if frequency < 55.0 else 60.0)
        self._cycles = max(1, round(0.2 * nominal))

    def _locked(self) -> Windows | None:
        tracker = self._tracker
        assert tracker is not None
        # A window's end lies 0.6 cycles early at most, and its phase 1.5 cycles behind the samples.
        if self._stop < self._begin + (self._cycles + 0.5) / self._nu:
            return None
        tracker.extend(self._buffer[self._reference], self._first)
        run = self._steady_run(tracker)
        if run is not None:
            return run
        # The next window is not steady, or not yet there: hold it once its samples are.
        end = self._begin + self._cycles / self._nu
        # A window that would end up to half a cycle later is then decided, however it was fed.
        reach = end + 0.95 * tracker.length + MARGIN + 2
        if self._stop < reach:
            return None
        self._failed += 1
        if self._failed > HOLD_WINDOWS:
            self._tracker = None
            self.lock = Lock.SEARCHING
            self.frequency = math.nan
            return self._fixed()
        self.lock = Lock.HOLDING
        return self._emit(
            np.array([self._begin, end]),
            np.array([self._nu * self._rate]),
            np.array([math.nan]),
            Lock.HOLDING,
            Flag.NONE,
        )

    def _steady_run(self, tracker: PhaseTracker) -> Windows | None:
        """As many steady windows as the points reach."""
        points = tracker.positions()
        if len(points) < 3:
            return None
        turns = (tracker.phase_at(self._begin) + 0.5 * np.pi) / (2.0 * np.pi)
        first = round(turns) + self._cycles
        last_turn = (tracker.phase[-1] + 0.5 * np.pi) / (2.0 * np.pi)
        count = math.floor((last_turn - first) / self._cycles) + 1
        if count < 1:
            return None
        targets = 2.0 * np.pi * (first + self._cycles * np.arange(count)) - 0.5 * np.pi
        rising = np.maximum.accumulate(tracker.phase)
        ends = np.interp(targets, rising, points)
        ends = ends[(ends + MARGIN + 1 < self._stop) & (ends < points[-1])]
        if not len(ends):
            return None
        positions = np.concatenate(([self._begin], ends))
        fit = tracker.fit(positions[:-1], positions[1:])
        good = self._good(fit, positions)
        # Where the wave breaks off the taper sees half of one, and its phase is off by up to 20
        # degrees: such an end is better carried on from before.
        good &= np.interp(ends, points, tracker.amplitude) > BROKEN_OFF * fit.amplitude
        count = len(good) if good.all() else int(np.argmin(good))
        if not count:
            return None
        nu = fit.nu[:count]
        off = np.abs(nu / tracker.nu - 1.0) > RETUNE
        if off.any():
            count = int(np.argmax(off)) + 1
        self._failed = 0
        self.lock = Lock.LOCKED
        self._nu = float(fit.nu[count - 1])
        self.frequency = self._nu * self._rate
        run = self._emit(
            positions[: count + 1],
            fit.nu[:count] * self._rate,
            fit.u_nu[:count] * self._rate,
            Lock.LOCKED,
            Flag.NONE,
        )
        if off.any():
            at = max(self._first, math.floor(self._begin) - 2 * tracker.length)
            self._tracker = PhaseTracker(self._nu, at)
            self._tracker.extend(self._buffer[self._reference], self._first)
        return run

    def _good(self, fit: LineFit, positions: Floats) -> npt.NDArray[np.bool_]:
        """Whether each window has a steady fundamental."""
        x = self._buffer[self._reference]
        cuts = np.floor(positions).astype(np.int64) - self._first
        n = np.diff(cuts)
        total = np.add.reduceat(x, cuts)[:-1]
        square = np.add.reduceat(x * x, cuts)[:-1]
        varying = np.maximum(square / n - (total / n) ** 2, 0.0)
        share = fit.amplitude**2 / 2.0
        hertz = fit.nu * self._rate
        spans = np.diff(positions) * np.append(self._nu, fit.nu[:-1])  # by the window before
        return np.asarray(
            (share > KEEP_SHARE * varying)
            & (share > 0.0)
            & (fit.scatter < KEEP_SCATTER)
            & (hertz > 0.9 * LOWEST)
            & (hertz < 1.1 * HIGHEST)
            & (np.abs(spans - self._cycles) < 0.6)
            & (fit.points >= 3)
        )

    def _fixed(self) -> Windows | None:
        """One window of fixed time."""
        length = max(2, round(FIXED_TIME * self._rate))
        begin = math.ceil(self._begin)
        if self._stop < begin + length + MARGIN + 1:
            return None
        self._unlocked += 1
        self.lock = Lock.SEARCHING if self._unlocked < 2 else Lock.UNLOCKED
        self._begin = float(begin)
        return self._emit(
            np.array([begin, begin + length], dtype=float),
            np.array([math.nan]),
            np.array([math.nan]),
            Lock.UNLOCKED,
            Flag.UNLOCKED,
            cycles=0,
        )

    def _emit(
        self,
        positions: Floats,
        frequency: Floats,
        u_frequency: Floats,
        lock: Lock,
        flag: Flag,
        cycles: int | None = None,
    ) -> Windows:
        count = len(positions) - 1
        flags = np.full(count, int(flag), np.int64)
        if self._pending_gap:
            flags[0] |= int(Flag.GAP)
            self._pending_gap = False
        low = max(0, math.floor(positions[0]) - MARGIN - 1 - self._first)
        high = min(self._stop - self._first, math.floor(positions[-1]) + MARGIN + 2 - self._first)
        samples = self._buffer[:, low:high]
        self._begin = float(positions[-1])
        self._emitted += count
        return Windows(
            samples=samples.view(),
            first=self._first + low,
            rate=self._rate,
            begins=positions[:-1].copy(),
            ends=positions[1:].copy(),
            cycles=np.full(count, self._cycles if cycles is None else cycles, np.int64),
            frequency=frequency.copy(),
            u_frequency=u_frequency.copy(),
            locks=(lock,) * count,
            flags=flags,
        )

    def _leftover(self) -> list[Windows]:
        """What remains of a stretch: whole windows still waiting, then a short one if none came."""
        runs: list[Windows] = []
        n = self._stop - self._origin
        if self._tracker is None and self._emitted == 0:
            at = self._origin
            for channel in (self._preferred, *range(self._channels)):
                if n * 40.0 / max(self._rate, 1.0) >= 1.5 and self._acquire_on(
                    channel, at, self._stop, confirm=False
                ):
                    break
        if self._tracker is not None:
            runs += self._last_windows(self._tracker)
        else:
            while (run := self._fixed()) is not None:
                runs.append(run)
        if self._emitted == 0 and n > 0:
            runs.append(self._short())
        return runs

    def _last_windows(self, tracker: PhaseTracker) -> list[Windows]:
        """Windows whose last cycle lies beyond the last phase point: the line carries on."""
        runs: list[Windows] = []
        while (run := self._steady_run(tracker)) is not None:
            runs.append(run)
            tracker = self._tracker or tracker
        points = tracker.positions()
        if len(points) < 3:
            return runs
        curve = tracker.curve(max(points[0], points[-1] - 20 * tracker.hop), points[-1])
        limit = np.array([self._stop - MARGIN - 1.0])
        phase = tracker.phase_at(self._begin)
        if self._begin > points[-1] or self._begin < points[0]:
            phase = float(curve.phase(np.array([self._begin]))[0])
        whole = math.floor((float(curve.phase(limit)[0]) - phase) / (2.0 * np.pi) + 1e-9)
        windows = whole // self._cycles
        if curve.scatter < KEEP_SCATTER and (windows >= 1 or (self._emitted == 0 and whole >= 1)):
            cycles = self._cycles if windows else whole
            turns = float(cycles) * np.arange(1.0, max(windows, 1) + 1.0)
            near = self._begin + turns / self._nu
            ends = curve.reach(phase + 2.0 * np.pi * turns, near)
            ends = np.minimum(ends, limit)
            positions = np.append(self._begin, ends)
            fit = tracker.fit(positions[:-1], positions[1:])
            if np.all(np.diff(positions) > 0.5 * cycles / self._nu):
                runs.append(
                    self._emit(
                        positions,
                        cycles / np.diff(positions) * self._rate,
                        fit.u_nu * self._rate,
                        self.lock if self.lock is not Lock.SEARCHING else Lock.LOCKED,
                        Flag.NONE if windows else Flag.EDGE,
                        cycles=cycles,
                    )
                )
        return runs

    def _short(self) -> Windows:
        """A stretch too short for a lock: the whole cycles it holds, or all there is."""
        n = self._stop - self._origin
        for channel in (self._preferred, *range(self._channels)):
            length = cycle_length(self._buffer[channel], self._rate)
            if not math.isfinite(length):
                continue
            cycles = int(n / length + 1e-6)
            # In the middle, so that the margins are real samples if there are any to spare.
            begin = self._origin + max(0.0, (n - cycles * length) / 2.0)
            return self._emit(
                np.array([begin, min(begin + cycles * length, float(self._stop))]),
                np.array([self._rate / length]),
                # Half a sample either way at the outermost (rectangular) of what was compared.
                np.array([self._rate / length / (n - length) / math.sqrt(12.0)]),
                Lock.LOCKED,
                Flag.EDGE,
                cycles=cycles,
            )
        positions = np.array([self._origin, self._stop], dtype=float)
        return self._emit(
            positions,
            np.array([math.nan]),
            np.array([math.nan]),
            Lock.UNLOCKED,
            Flag.UNLOCKED | Flag.EDGE,
            cycles=0,
        )
