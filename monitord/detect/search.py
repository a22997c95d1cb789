"""Finding a carrier: the strongest line within reach, in the last 0.4 s of baseband.

The line must stand clear of the median of the spectrum around it: noise alone does that less than once in
10^20 hops (the largest of N exponential bins exceeds x times their mean with probability N exp(-x)).
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from monitord.blocks import Complex, Flags, Precise

HOPS = 4
_CLEAR_OF_MEDIAN = 100.0
_ZERO_PADDING = 4
_SAME_LEVEL = 0.1


@dataclass(frozen=True, slots=True)
class Line:
    """Lines found, one entry for each row searched.

    found: there is one (rows,).
    offset_hz: its frequency (rows,).
    phase: its phase at the end of the stretch searched, rad (rows,).
    amplitude: its amplitude, full scale = 1 (rows,).
    in_phase: the stretch searched, turned to the line's phase, mean of each step (rows, HOPS * steps).
    steady: hops of that stretch, from the last one back, in which the line stood as it does now (rows,).
    """

    found: Flags
    offset_hz: Precise
    phase: Precise
    amplitude: Precise
    in_phase: Precise
    steady: NDArray[np.int64]


class LineSearch:
    """Keeps the last hops at a rate just wide enough for the acquisition range, and searches them."""

    def __init__(self, channels: int, rate_hz: float, frames: int, steps: int, acquire_hz: float) -> None:
        self._part = _longest_part(frames, steps, rate_hz, max(3 * acquire_hz, 200.0))
        parts = frames // self._part
        self.rate_hz = rate_hz / self._part
        count = HOPS * parts
        self._past: Complex = np.zeros((channels, count), np.complex64)
        self._parts = parts
        self._steps = steps
        self._heard = np.zeros(channels, np.int64)
        self._window = np.hanning(count + 1)[:-1]
        size = _ZERO_PADDING * count
        self._offset_hz = scipy.fft.fftfreq(size, 1 / self.rate_hz)
        near = np.flatnonzero(np.abs(self._offset_hz) <= acquire_hz + 2 * self.rate_hz / count)
        self._near = near[np.argsort(self._offset_hz[near])]
        self._short_window = np.hanning(parts + 1)[:-1]
        short_hz = np.abs(scipy.fft.fftfreq(_ZERO_PADDING * parts, 1 / self.rate_hz))
        self._short_near = np.flatnonzero(short_hz <= acquire_hz + 2 * self.rate_hz / parts)
        self._droop = np.sinc(self._offset_hz / self.rate_hz)  # of summing over a part
        self._time = (np.arange(count) + 0.5 - count) / self.rate_hz

    def listen(self, samples: Complex, searching: Flags) -> None:
        """Take one hop of baseband (channels, frames); rows not searching forget what they had."""
        self._heard = np.where(searching, self._heard + 1, 0)
        if not searching.any():
            return
        parts = self._parts
        self._past[:, :-parts] = self._past[:, parts:]
        self._past[:, -parts:] = samples.reshape(len(samples), parts, self._part).mean(axis=2)

    @property
    def ready(self) -> Flags:
        """Rows that have been listened to for long enough (channels,)."""
        return self._heard >= HOPS

    def glimpse(self) -> Precise:
        """Amplitude of the line that the last hop alone shows, full scale = 1; 0 where none or not listening."""
        seen = self._heard > 0
        amplitude = np.zeros(len(seen))
        if seen.any():
            wave = self._past[seen, -self._parts :] * self._short_window
            power = np.square(np.abs(scipy.fft.fft(wave, _ZERO_PADDING * self._parts, axis=1)))
            near = power[:, self._short_near].max(axis=1)
            clear = near > _CLEAR_OF_MEDIAN * np.median(power, axis=1)
            amplitude[seen] = np.sqrt(near * clear) / self._short_window.sum()
        return amplitude

    def find(self, rows: Flags) -> Line:
        """Search the given rows (a mask over the channels)."""
        wave = self._past[rows] * self._window
        spectrum = scipy.fft.fft(wave, len(self._offset_hz), axis=1)
        power = np.square(np.abs(spectrum)) / np.square(self._droop)
        near = power[:, self._near]
        best = np.argmax(near[:, 1:-1], axis=1) + 1
        row = np.arange(len(near))
        low, top, high = (np.log(near[row, best + k] + 1e-300) for k in (-1, 0, 1))
        bend = low - 2 * top + high
        shift = np.where(bend < 0, (low - high) / np.where(bend < 0, 2 * bend, 1), 0)
        offset_hz = self._offset_hz[self._near[best]] + shift * self.rate_hz / len(self._offset_hz)
        turn = np.exp(-2j * np.pi * offset_hz[:, None] * self._time)
        droop = np.sinc(offset_hz / self.rate_hz)
        line = np.sum(wave * turn, axis=1) / self._window.sum() / droop
        found = near[row, best] > _CLEAR_OF_MEDIAN * np.median(power, axis=1)
        turned = (self._past[rows] * turn * np.exp(-1j * np.angle(line))[:, None]).real
        in_phase = turned.reshape(len(line), HOPS * self._steps, -1).mean(axis=2) / droop[:, None]
        return Line(found, offset_hz, np.angle(line), np.abs(line), in_phase, _steady_hops(in_phase))


def _steady_hops(in_phase: Precise) -> NDArray[np.int64]:
    """Hops from the last back that have its mean within a tenth, less the one in which the line may have begun."""
    level = in_phase.reshape(len(in_phase), HOPS, -1).mean(axis=2)
    same = np.abs(level - level[:, -1:]) < _SAME_LEVEL * np.abs(level[:, -1:])
    run = np.where(same.all(axis=1), HOPS, np.argmin(same[:, ::-1], axis=1) - 1)
    return np.asarray(np.maximum(run, 0))


def _longest_part(frames: int, steps: int, rate_hz: float, needed_hz: float) -> int:
    """The longest part that divides a step and keeps the rate needed."""
    step = frames // steps
    return max(
        part for part in range(1, step + 1) if step % part == 0 and (part == 1 or rate_hz / part >= needed_hz)
    )
