"""Excursions beyond the limits: positive, and negative by reversal or by cut-off.

A *reversal* takes the in-phase part below 1 - limit by more than the noise can. A *cut-off* never does: the
carrier stays at zero for longer than an excursion of exactly 100 % of the same width would hold it there. Near its
bottom such an excursion is a parabola, and the mean of a parabola below a level h is h/3; a trough whose mean
is clearly less, and whose core is at zero, was cut off. A trough longer than 25 ms is a break of the carrier,
which is not over-modulation.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Flags, Precise, Real
from monitord.measure.validity import peaks_mean_something
from monitord.quantities import Quantity
from monitord.stage import Bank

# Noise alone lifts the highest of the thousands of peaks in a minute by 2 sigma and more; an excursion must be
# 4 sigma clear beyond that.
CLEAR_SIGMA = 6.0
_CLEAR_LEAST = 0.002  # arithmetic, filter ripple and the carrier's mean, when there is no noise
_TROUGH_BELOW = 0.1
_LONGEST_S = 0.025
_PARABOLA = 0.95 / 3
_AT_ZERO = 0.006
_RISING = 1.1
_LEAP = 2.0  # no modulation doubles the carrier from one hop to the next


@dataclass(frozen=True, slots=True)
class _Troughs:
    """Stretches of in-phase below a level, in all rows: one entry each.

    row, first, last: where; width: in samples, between the crossings; mean: over the width; core: mean of the
    middle third; lowest: the smallest sample.
    """

    row: NDArray[np.int64]
    first: NDArray[np.int64]
    last: NDArray[np.int64]
    width: Precise
    mean: Precise
    core: Precise
    lowest: Precise


class ExcursionMeter:
    """Per hop: for how long and when the modulation was beyond the limits."""

    quantities: tuple[Quantity, ...] = ()

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._negative = np.array([channel.limits.negative_peak for channel in bank.channels])
        self._positive = np.array([channel.limits.positive_peak for channel in bank.channels])
        self._judged = np.array([not one.carrierless for one in bank.channels])  # else scaled to its own peak
        self._follows = np.array([one.depth_reference == "present" for one in bank.channels])
        self._keep = min(bank.frames, round(_LONGEST_S * bank.rate_hz) + 2)
        self._resolution = bank.rate_hz / bank.noise_hz  # samples: nothing shorter can be flat
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._usable = np.zeros(count, bool)
        self._tail: Real = np.full((count, self._keep), np.nan, np.float32)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        return {}

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = (
            self._judged & detected.settled & ~detected.broken & peaks_mean_something(detected, self._bank)
        )
        usable &= detected.hop_amplitude < _LEAP * (2 * detected.recent_amplitude - detected.hop_amplitude)
        judged, self._usable = usable & self._usable, usable  # a trough may have begun in the hop before
        clear = np.maximum(CLEAR_SIGMA * detected.sigma, _CLEAR_LEAST)
        over_s, over_span_s = self._above(detected, judged, clear)
        under = self._below(detected, judged, clear)
        self._tail = detected.in_phase[:, -self._keep :].copy()
        return {"over_positive_s": over_s, "over_positive_span_s": over_span_s, **under}

    def _above(self, detected: Detected, judged: Flags, clear: Precise) -> tuple[Precise, Precise]:
        # The carrier's mean lags; where the carrier rises, what it is now must not be taken for modulation.
        now = np.maximum(detected.hop_amplitude, detected.recent_amplitude) / detected.amplitude
        now = np.where(self._follows, now, 1.0)
        ceiling = ((1 + self._positive + clear) * np.fmax(now, 1)).astype(np.float32)
        last_hop = 2 * detected.recent_amplitude - detected.hop_amplitude
        rising = detected.hop_amplitude > _RISING * last_hop  # somewhere in this hop, nobody knows where
        rows = np.flatnonzero(judged & ~rising & (detected.in_phase.max(axis=1) > ceiling))
        spent, span = np.zeros(len(judged)), np.full((len(judged), 2), np.nan)
        if len(rows):
            beyond = detected.in_phase[rows] > ceiling[rows, None]
            spent[rows] = beyond.sum(axis=1) / detected.rate_hz
            last = beyond.shape[1] - 1 - np.argmax(beyond[:, ::-1], axis=1)
            span[rows] = self._time_s(detected, np.stack([np.argmax(beyond, axis=1), last + 1], axis=1))
        return spent, span

    def _time_s(self, detected: Detected, sample: NDArray[np.int64]) -> Precise:
        """Seconds since the stream began of samples of the hop's baseband (negative: of the hop before)."""
        start_s = detected.span.start / detected.span.rate_hz - detected.delay_s
        return np.asarray(start_s + sample / detected.rate_hz)

    def _below(self, detected: Detected, judged: Flags, clear: Precise) -> Mapping[str, Precise]:
        """Negative excursions in the troughs that ended within this hop."""
        count = len(judged)
        spent, span, cut = np.zeros(count), np.full((count, 2), np.nan), np.zeros(count, bool)
        level = np.maximum(_TROUGH_BELOW, 2 * clear)
        judged = judged & (level < 0.6)  # else noise alone goes that deep
        level = np.maximum(level, 1 - self._negative)
        lowest = np.fmin(detected.in_phase.min(axis=1), self._tail.min(axis=1))
        near = np.maximum(_AT_ZERO + 4.3 * detected.sigma, 1 - self._negative - clear)
        rows = np.flatnonzero(judged & (lowest < near))  # elsewhere neither verdict is possible
        if len(rows):
            wave = np.concatenate([self._tail[rows], detected.in_phase[rows]], axis=1)
            trough = _troughs(wave, level[rows])
            self._judge(detected, rows, wave, trough, clear, level, (spent, span, cut))
        return {"over_negative_s": spent, "over_negative_span_s": span, "cut_off": cut.astype(np.float64)}

    def _judge(
        self,
        detected: Detected,
        rows: NDArray[np.int64],
        wave: Real,
        trough: _Troughs,
        clear: Precise,
        level: Precise,
        found: tuple[Precise, Precise, Flags],
    ) -> None:
        """Write into `found` (seconds, first and last time, cut-off) the excursions among the troughs."""
        spent, span, cut_off = found
        row = rows[trough.row]
        recent = (trough.last >= self._keep - 1) & (trough.width < _LONGEST_S * detected.rate_hz)
        reversed_ = recent & (trough.lowest < 1 - self._negative[row] - clear[row])
        sigma = detected.sigma[row]
        samples = np.maximum(trough.width / self._resolution * 2, 1)
        spread = sigma / np.sqrt(samples)
        cut = recent & (self._negative[row] <= 1) & (trough.width >= 1.2 * self._resolution)
        cut &= trough.mean + CLEAR_SIGMA * spread < _PARABOLA * level[row]
        cut &= np.abs(trough.core) < _AT_ZERO + 1.3 * sigma + 3 * spread
        reversed_ &= ~cut  # a core at zero: what goes below it is the channel filter's ringing at the corners
        floor = np.where(reversed_, 1 - self._negative[row] - clear[row], np.maximum(0.02, 3 * sigma))
        deep = wave < _per_row(floor, trough.row, reversed_ | cut, len(rows))[:, None]
        depth = np.concatenate([np.zeros((len(rows), 1)), np.cumsum(deep, axis=1)], axis=1)
        over = np.flatnonzero(reversed_ | cut)
        time = depth[trough.row[over], trough.last[over] + 1] - depth[trough.row[over], trough.first[over]]
        np.add.at(spent, row[over], time / detected.rate_hz)
        edges = self._time_s(detected, np.stack([trough.first, trough.last + 1], axis=1)[over] - self._keep)
        np.fmin.at(span[:, 0], row[over], edges[:, 0])
        np.fmax.at(span[:, 1], row[over], edges[:, 1])
        cut_off[row[cut]] = True
        cut_off[row[reversed_]] = False


def _per_row(value: Precise, row: NDArray[np.int64], use: Flags, count: int) -> Precise:
    """The largest of `value` in each row among the entries in use; -inf in rows without one."""
    largest = np.full(count, -np.inf)
    np.maximum.at(largest, row[use], value[use])
    return largest


def _troughs(wave: Real, level: Precise) -> _Troughs:
    """All stretches of `wave` (rows, samples) below `level` (rows,) that both begin and end within it."""
    rows, samples = wave.shape
    low = np.zeros((rows, samples + 2), bool)
    np.less(wave, level[:, None], out=low[:, 1:-1])
    change = np.diff(low.view(np.int8), axis=1)
    row, first = np.nonzero(change == 1)
    last = np.nonzero(change == -1)[1] - 1
    whole = (first > 0) & (last < samples - 1)
    row, first, last = row[whole], first[whole], last[whole]
    height = level[row]
    before = _crossing(wave[row, first - 1], wave[row, first], height)
    after = _crossing(wave[row, last + 1], wave[row, last], height)
    width = last - first + before + after
    total = np.concatenate([np.zeros((rows, 1)), np.cumsum(wave, axis=1, dtype=np.float64)], axis=1)
    area = total[row, last + 1] - total[row, first]
    ends = wave[row, first], wave[row, last]
    area += ((before - 1) * ends[0] + before * height + (after - 1) * ends[1] + after * height) / 2
    third = (last + 1 - first) // 3
    core = (total[row, last + 1 - third] - total[row, first + third]) / (last + 1 - first - 2 * third)
    bounds = np.stack([row * samples + first, row * samples + last + 1], axis=1).ravel()
    lowest = np.minimum.reduceat(wave.ravel(), bounds)[::2] if len(bounds) else np.empty(0)
    return _Troughs(row, first, last, width, area / np.maximum(width, 1e-9), core, lowest)


def _crossing(outside: Real, inside: Real, height: Precise) -> Precise:
    """How far, in samples, the level is crossed before the first sample inside; 1 where the wave is not known."""
    fall = outside - inside
    return np.where(fall > 0, (height - inside) / np.where(fall > 0, fall, 1), 1.0)
