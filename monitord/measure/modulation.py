"""Modulation: true peaks over a window, frequently recurring peaks, rms."""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Flags, Precise, Real
from monitord.detect.averaging import BRIEF_HOPS
from monitord.measure.noiselift import LEAST_NEAR, NEAR_SIGMA, Top, largest, lift, spread
from monitord.measure.truepeak import TruePeaks
from monitord.measure.validity import peaks_mean_something
from monitord.quantities import COVERAGE, Quantity
from monitord.stage import Bank

WINDOW_S = 10.0
RECURRING_WINDOW_S = 60.0
RECURRING_RANK = 10  # common practice: how many make "frequently recurring"
_RECURRING_SHARE = 0.9
_MOVING = 0.01  # of the carrier's brief mean against the long one: peaks wait for the brief mean around them
_OWN_ERROR = 0.001  # of filter, interpolation and mean together, without noise: 95 % of tones and programme
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
            "modulation_peak_uncertainty_ratio",
            "",
            "Expanded uncertainty (95 %) of the positive and negative peak.",
            "JCGM 100",
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
        self._follows = np.array([one.depth_reference == "present" for one in bank.channels])
        self._carrier_moves = np.array([one.carrier_control for one in bank.channels])
        self._independent = 2 * bank.noise_hz / bank.rate_hz  # of the samples of a hop
        self._average_s = bank.channels[0].averaging_s
        self._average_hops = max(1, round(bank.channels[0].averaging_s / bank.hop_s))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._true = TruePeaks(count, self._bank.frames)
        self._peaks = np.full((self._slots, 2, count), np.nan)  # a ring: `_place` holds the newest
        self._raw = np.full((self._slots, 2, count), np.nan)  # the same peaks, in-phase, full scale = 1
        self._near = np.ones(
            (self._slots, 2, 2, count)
        )  # independent samples within 1 and 3 sigma of each peak
        self._equal = np.zeros((2, count))  # the tops are those of a steady tone, as the last window had it
        self._later = np.full((self._slots, 2, count), np.nan)  # mean square and mean that wait for `_center`
        self._level = np.full((self._slots, count), np.nan)  # the carrier's amplitude as it was taken
        self._recent = np.full((self._slots, count), np.nan)  # the carrier's amplitude about then
        self._sigma = np.full((self._slots, count), np.nan)  # of the reception noise
        self._power = np.full((self._slots, count), np.nan)  # mean square of the modulation, noise subtracted
        self._where = np.zeros((self._slots, 2, count))  # of the peaks, in hops from the middle of theirs
        self._brief = np.full((self._slots, count), np.nan)  # the carrier's brief mean as it was taken
        self._moving = np.zeros((self._average_hops // 2 + 1, count), bool)  # the newest is the last
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
        seam = self._true.seam
        seam += 1
        seam *= (self._amplitude / detected.amplitude).astype(np.float32)[:, None]
        seam -= 1
        highest, lowest, where = self._true.find()
        usable = detected.settled & ~detected.broken & ~detected.fading
        peaks = np.where(usable & peaks_mean_something(detected, self._bank), [highest, -lowest], np.nan)
        noise_power = detected.audio_noise_density * self._bank.noise_hz / np.square(detected.amplitude)
        sigma = np.sqrt(noise_power)
        near = self._near_top(wave, highest, lowest, sigma)
        moving = np.abs(detected.brief_amplitude / detected.mean_amplitude - 1) > _MOVING
        moving &= self._average_hops > 1
        moving &= self._follows
        self._moving[:-1] = self._moving[1:]
        self._moving[-1] = moving
        self._remember(np.where(moving, np.nan, peaks), near, sigma, detected)
        square = np.einsum("cf,cf->c", wave, wave) / self._bank.frames - noise_power
        self._where[self._place] = where - 0.5
        self._brief[self._place] = detected.brief_amplitude
        self._power[self._place] = np.where(usable, square, np.nan)
        self._raw[self._place] = (1 + peaks * [[1], [-1]]) * detected.amplitude
        self._add_square(square, usable & ~moving)
        self._later[self._place] = np.where(usable & moving, [square, wave.mean(axis=1)], np.nan)
        self._heard |= usable
        self._center(detected.amplitude)
        self._true.advance()
        peaks = peaks - lift(near, self._equal) * sigma
        return {"positive_peak": peaks[0], "negative_peak": peaks[1]}

    def _near_top(self, wave: Real, highest: Precise, lowest: Precise, sigma: Precise) -> Precise:
        """How many independent samples stand near the highest and the lowest, (1 and 3 sigma, 2, channels)."""
        near = np.empty((2, 2, len(wave)))
        for level, (reach, least) in enumerate(zip(NEAR_SIGMA, LEAST_NEAR, strict=True)):
            top, bottom = (
                (highest - reach * sigma).astype(np.float32),
                (lowest + reach * sigma).astype(np.float32),
            )
            near[level, 0] = np.count_nonzero(wave > top[:, None], axis=1)
            near[level, 1] = np.count_nonzero(wave < bottom[:, None], axis=1)
            near[level] = np.maximum(near[level] * self._independent, least)
        return near

    def _remember(self, peaks: Precise, near: Precise, sigma: Precise, detected: Detected) -> None:
        # A cut is known for sure only in the hop after the one in which it began.
        self._peaks[self._place, :, detected.broken] = np.nan
        self._raw[self._place, :, detected.broken] = np.nan
        self._later[self._place, :, detected.broken] = np.nan
        self._place = (self._place + 1) % self._slots
        self._peaks[self._place] = peaks
        self._level[self._place] = detected.amplitude
        self._recent[self._place] = detected.recent_amplitude
        self._near[self._place] = near
        self._sigma[self._place] = sigma

    def _add_square(self, square: Precise, use: Flags) -> None:
        """Add a hop's mean square to the interval, in the rows to be used."""
        self._square += np.where(use, square, 0)
        self._square_hops += use

    def _center(self, amplitude: Precise) -> None:
        """Refer earlier peaks to the carrier's mean around them, now that it is known.

        The detector can only look back, and its mean lags by half its length. Where the carrier stands, the peaks of
        half an averaging time ago are referred to the long mean. Where it moves, those of three hops ago are referred
        to a parabola through the brief means about their hop and its neighbours; until then they wait.
        """
        half = self._average_hops // 2
        around = amplitude if self._average_hops % 2 else (amplitude + self._amplitude) / 2
        self._amplitude = amplitude
        self._refer(half, around, np.stack([around, around]), ~self._moving[0])
        back = BRIEF_HOPS // 2 + 1
        if half >= back:
            before, around, after = self._brief[(self._place - np.arange(2, -1, -1)) % self._slots]
            away = self._where[(self._place - back) % self._slots]
            there = around + away * (after - before) / 2 + np.square(away) * (after - 2 * around + before) / 2
            self._refer(back, around, there, self._moving[-1 - back])
        self._valid_hops += np.isfinite(self._peaks[(self._place - half) % self._slots, 0])

    def _refer(self, back: int, around: Precise, there: Precise, rows: Flags) -> None:
        """Refer the peaks and squares of `back` hops ago, in some rows; drop them where the carrier leapt.

        around: the carrier about the hop (channels,); there: where its two peaks are (2, channels).
        """
        place = (self._place - back) % self._slots
        use = rows & np.isfinite(around)
        centered = (self._raw[place] / there - 1) * [[1], [-1]]
        self._peaks[place] = np.where(use, centered, self._peaks[place])
        about = (place + np.arange(-1, min(back, 1) + 1)) % self._slots
        leapt = (
            use
            & self._follows
            & ~self._carrier_moves
            & (np.abs(self._recent[about] / around - 1) > _LEAPT).any(axis=0)
        )
        self._peaks[place, :, leapt] = np.nan
        # The same for the squares that waited: (1 + m) in units of the carrier then, g times that of the carrier now.
        square, mean = self._later[place]
        g = self._level[place] / around
        square = g**2 * (1 + 2 * mean + square) - 2 * g * (1 + mean) + 1
        self._add_square(square, use & np.isfinite(square) & ~leapt)
        self._later[place, :, use] = np.nan

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        heard = self._heard  # nothing of the past stands for an interval without a valid hop
        waiting = self._average_hops // 2  # the newest may not be known yet
        window = (self._place - np.arange(self._window + waiting)) % self._slots
        sigma = self._sigma[self._place]
        rms = np.sqrt(np.maximum(_mean_known(self._power[window]), 0))
        top = largest(self._peaks[window], self._near[window], sigma, rms)
        self._equal = top.equal
        peaks = np.where(heard, top.peak - lift(top.near, top.equal) * sigma, np.nan)
        recurring = self._recurring(heard)
        known = heard & (self._square_hops > 0)
        mean = np.divide(self._square, self._square_hops, out=np.full(heard.shape, np.nan), where=known)
        self._begin()
        return {
            "modulation_positive_peak_ratio": peaks[0],
            "modulation_negative_peak_ratio": peaks[1],
            "modulation_peak_uncertainty_ratio": self._uncertainty(peaks, top, sigma),
            "modulation_recurring_positive_peak_ratio": recurring[0],
            "modulation_recurring_negative_peak_ratio": recurring[1],
            "modulation_rms_ratio": np.sqrt(np.maximum(mean, 0)),
        }

    def _uncertainty(self, peaks: Precise, top: Top, sigma: Precise) -> Precise:
        """Expanded uncertainty of the worse of the two peaks, (channels,).

        Noise on the peak, noise of the carrier's mean that it refers to (a Hann window of T seconds passes 1.5 / T Hz
        of it), and what interpolation, filter and mean err by without noise, joined as independent (JCGM 100, 5.1.2).
        """
        noise = spread(top.near, top.equal) * sigma
        carrier = (1 + np.abs(peaks)) * sigma * np.sqrt(0.75 / (self._average_s * self._bank.noise_hz))
        worst = np.sqrt(np.square(noise) + np.square(carrier)).max(axis=0)
        return np.asarray(np.hypot(COVERAGE * worst, _OWN_ERROR))

    def _recurring(self, heard: Flags) -> Precise:
        """The 10th largest slot of the window, (2, channels); NaN until the window's time has been valid."""
        enough = np.isfinite(self._peaks[:, 0]).sum(axis=0) >= _RECURRING_SHARE * self._slots
        ready = heard & enough & (self._valid_hops >= self._slots)
        if not ready.any():
            return np.full(self._peaks.shape[1:], np.nan)
        peaks = self._peaks - lift(self._near.swapaxes(0, 1), self._equal) * self._sigma[:, None]
        slots = np.where(np.isfinite(peaks), peaks, -np.inf)
        ranked = np.partition(slots, -RECURRING_RANK, axis=0)[-RECURRING_RANK]
        return np.where(ready, ranked, np.nan)


def _mean_known(values: Precise) -> Precise:
    """Mean over the first axis of what is not NaN; NaN where all is."""
    known = np.isfinite(values)
    count = known.sum(axis=0)
    mean = np.where(known, values, 0).sum(axis=0) / np.maximum(count, 1)
    return np.where(count > 0, mean, np.nan)
