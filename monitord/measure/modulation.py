"""Modulation: true peaks over a window, frequently recurring peaks, rms."""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Flags, Precise, Real
from monitord.measure.noiselift import NEAR_TOP_SIGMA, corrected_largest, lift
from monitord.measure.truepeak import TruePeaks
from monitord.measure.validity import peaks_mean_something
from monitord.quantities import Quantity
from monitord.stage import Bank

WINDOW_S = 10.0
RECURRING_WINDOW_S = 60.0
RECURRING_RANK = 10  # common practice: how many make "frequently recurring"
_RECURRING_SHARE = 0.9
_MOVING = 0.03  # of the carrier against its mean: peaks wait for the mean around them
_LEAPT = 0.1  # and against that: no peak is told


class ModulationMeter:
    """m(t) = in-phase / carrier - 1; positive peak max m, negative peak -min m (47 CFR 73.14; CHECKS A2)."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "modulation_positive_peak_ratio",
            "",
            "Largest positive true peak of the modulation in the last 10 s, less what noise lifts it.",
            "47 CFR 73.14",
            trusted_only=True,
        ),
        Quantity(
            "modulation_negative_peak_ratio",
            "",
            "Largest negative true peak of the modulation in the last 10 s, less what noise lifts it.",
            "47 CFR 73.14",
            trusted_only=True,
        ),
        Quantity(
            "modulation_recurring_positive_peak_ratio",
            "",
            "Frequently recurring positive peak: 10th largest of the 100 ms maxima of 60 s.",
            "47 CFR 73.1570; rank: common practice",
            trusted_only=True,
        ),
        Quantity(
            "modulation_recurring_negative_peak_ratio",
            "",
            "Frequently recurring negative peak: 10th largest of the 100 ms maxima of 60 s.",
            "47 CFR 73.1570; rank: common practice",
            trusted_only=True,
        ),
        Quantity(
            "modulation_rms_ratio",
            "",
            "Rms of the modulation over the interval, reception noise subtracted.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._window = round(WINDOW_S / bank.hop_s)
        self._slots = round(RECURRING_WINDOW_S / bank.hop_s)
        self._independent = 2 * bank.noise_hz / bank.rate_hz  # of the samples of a hop
        self._average_hops = max(1, round(bank.channels[0].carrier_average_s / bank.hop_s))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._true = TruePeaks(count, self._bank.frames)
        self._peaks = np.full((self._slots, 2, count), np.nan)  # a ring: `_place` holds the newest
        self._raw = np.full((self._slots, 2, count), np.nan)  # the same peaks, in-phase, full scale = 1
        self._count = np.ones((self._slots, 2, count))  # independent samples near each peak
        self._later = np.full((self._slots, 2, count), np.nan)  # mean square and mean that wait for `_center`
        self._level = np.full((self._slots, count), np.nan)  # the carrier's amplitude as it was taken
        self._recent = np.full((self._slots, count), np.nan)  # the carrier's amplitude about then
        self._sigma = np.full((self._slots, count), np.nan)  # of the reception noise
        self._place = 0
        self._amplitude = np.full(count, np.nan)  # of the hop before
        self._valid_hops = np.zeros(count, np.int64)
        self._begin()

    def _begin(self) -> None:
        count = len(self._bank.channels)
        self._square = np.zeros(count)
        self._square_hops = np.zeros(count)
        self._heard = np.zeros(count, bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        wave = self._true.fresh
        np.subtract(detected.in_phase, 1, out=wave)
        highest, lowest = self._true.find()
        usable = detected.settled & ~detected.broken
        peaks = np.where(usable & peaks_mean_something(detected, self._bank), [highest, -lowest], np.nan)
        noise_power = detected.noise_density * self._bank.noise_hz / np.square(detected.amplitude)
        sigma = np.sqrt(noise_power)
        count = self._near_top(wave, highest, lowest, sigma)
        moving = np.abs(detected.recent_amplitude / detected.amplitude - 1) > _MOVING
        moving &= self._average_hops > 1
        self._remember(np.where(moving, np.nan, peaks), count, sigma, detected)
        self._raw[self._place] = (1 + peaks * [[1], [-1]]) * detected.amplitude
        square = np.einsum("cf,cf->c", wave, wave) / self._bank.frames - noise_power
        self._add_square(square, usable & ~moving)
        self._later[self._place] = np.where(usable & moving, [square, wave.mean(axis=1)], np.nan)
        self._heard |= usable
        self._center(detected.amplitude)
        self._true.advance()
        peaks = peaks - lift(count) * sigma
        return {"positive_peak": peaks[0], "negative_peak": peaks[1]}

    def _near_top(self, wave: Real, highest: Precise, lowest: Precise, sigma: Precise) -> Precise:
        """How many independent samples stand within 3 sigma of the highest and of the lowest, (2, channels)."""
        reach = NEAR_TOP_SIGMA * sigma
        above = (wave > (highest - reach).astype(np.float32)[:, None]).sum(axis=1)
        below = (wave < (lowest + reach).astype(np.float32)[:, None]).sum(axis=1)
        return np.maximum(np.array([above, below]) * self._independent, 1.0)

    def _remember(self, peaks: Precise, count: Precise, sigma: Precise, detected: Detected) -> None:
        # A cut is known for sure only in the hop after the one in which it began.
        self._peaks[self._place, :, detected.broken] = np.nan
        self._raw[self._place, :, detected.broken] = np.nan
        self._later[self._place, :, detected.broken] = np.nan
        self._place = (self._place + 1) % self._slots
        self._peaks[self._place] = peaks
        self._level[self._place] = detected.amplitude
        self._recent[self._place] = detected.recent_amplitude
        self._count[self._place] = count
        self._sigma[self._place] = sigma

    def _add_square(self, square: Precise, use: Flags) -> None:
        """Add a hop's mean square to the interval, in the rows to be used."""
        self._square += np.where(use, square, 0)
        self._square_hops += use

    def _center(self, amplitude: Precise) -> None:
        """Refer the peaks of half an averaging time ago to the carrier's mean around them, now that it is known.

        The detector can only look back; where the carrier moves, its mean lags by half its length, and the peaks
        wait until they can be referred to what was there. Where it leapt, no mean is right.
        """
        half = self._average_hops // 2
        around = amplitude if self._average_hops % 2 else (amplitude + self._amplitude) / 2
        self._amplitude = amplitude
        place = (self._place - half) % self._slots
        centered = (self._raw[place] / around - 1) * [[1], [-1]]
        self._peaks[place] = np.where(np.isfinite(around), centered, self._peaks[place])
        about = (place + np.arange(-1, min(half, 1) + 1)) % self._slots
        leapt = (np.abs(self._recent[about] / around - 1) > _LEAPT).any(axis=0)
        self._peaks[place, :, leapt] = np.nan
        self._valid_hops += np.isfinite(self._peaks[place, 0])
        # The same for the squares that waited: (1 + m) in units of the carrier then, g times that of the carrier now.
        square, mean = self._later[place]
        g = self._level[place] / around
        square = g**2 * (1 + 2 * mean + square) - 2 * g * (1 + mean) + 1
        self._add_square(square, np.isfinite(square) & ~leapt)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        heard = self._heard  # nothing of the past stands for an interval without a valid hop
        window = (self._place - np.arange(self._window)) % self._slots
        largest = corrected_largest(self._peaks[window], self._count[window], self._sigma[self._place])
        positive, negative = np.where(heard, largest, np.nan)
        recurring = self._recurring(heard)
        known = heard & (self._square_hops > 0)
        mean = np.divide(self._square, self._square_hops, out=np.full(heard.shape, np.nan), where=known)
        self._begin()
        return {
            "modulation_positive_peak_ratio": positive,
            "modulation_negative_peak_ratio": negative,
            "modulation_recurring_positive_peak_ratio": recurring[0],
            "modulation_recurring_negative_peak_ratio": recurring[1],
            "modulation_rms_ratio": np.sqrt(np.maximum(mean, 0)),
        }

    def _recurring(self, heard: Flags) -> Precise:
        """The 10th largest slot of the window, (2, channels); NaN until the window's time has been valid."""
        enough = np.isfinite(self._peaks[:, 0]).sum(axis=0) >= _RECURRING_SHARE * self._slots
        ready = heard & enough & (self._valid_hops >= self._slots)
        if not ready.any():
            return np.full(self._peaks.shape[1:], np.nan)
        peaks = self._peaks - lift(self._count) * self._sigma[:, None]
        slots = np.where(np.isfinite(peaks), peaks, -np.inf)
        ranked = np.partition(slots, -RECURRING_RANK, axis=0)[-RECURRING_RANK]
        return np.where(ready, ranked, np.nan)
