"""A steady test tone, found by itself: its frequency, SINAD and total harmonic distortion.

Everything comes from `Second.audio`, the Hann spectrum that all meters share, and only rows in which one line holds
most of the power are looked at further. A steady tone is a line of known shape: amplitude, phase and frequency are
fitted to it by least squares, and it is subtracted whole, side lobes too; what is left is noise and distortion (AES17:
the residual after the fitted sinusoid is removed). Programme is told from a tone by what the line does not explain
near itself (anything that moves within the second), and by amplitude, frequency and phase in the second before.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Flags, Precise, Second
from monitord.measure.hannline import between_bins, line_shape
from monitord.quantities import Quantity
from monitord.stage import Bank

LOWEST_HZ = 20.0
LEAST_DEPTH = (
    0.05  # residual modulation, hum among it, stays below 5 % of the carrier; from memory: ICAO Annex 10
)
_OTHERS = 0.25  # of the tone's power: 6 dB
_NOISE_TRUST = 0.1  # how far the reception noise may be mistaken
_CLEAR = 100.0  # line over a noise bin
_MOVING = 1e-3  # power beside the line that it does not explain, re the line: -30 dB
_REACH = 16  # bins on each side that are looked at for this
_HARMONIC_REACH = 3
_DRIFT_HZ = 0.02
_SWELL = 0.01
_SIGMAS = 6.0
_LINE_POWER = 3.0  # bins of a Hann line of amplitude a: sum of squares 1.5 a^2, power a^2 / 2
_HANN_COVARIANCE = (
    1.0,
    2 / 3,
    1 / 6,
)  # of neighbouring bins in white noise, turned to mid-second (Harris 1978)

Lines = NDArray[np.complex128]
Bins = NDArray[np.int64]


def _from_middle(bins: Bins) -> Precise:
    """What turns the phase of these bins from the beginning to the middle of the second: +1 or -1."""
    return np.where(bins % 2, -1.0, 1.0)


@dataclass(frozen=True, slots=True)
class _Fit:
    """One line for each of the rows that may hold a tone, all arrays (found,).

    row: which row of the bank. bins: frequency in bins. line: complex amplitude at the middle of the second.
    noise: mean power of a bin of reception noise. moving: power beside the line that it does not explain.
    """

    row: Bins
    bins: Precise
    line: Lines
    noise: Precise
    moving: Precise

    @property
    def power(self) -> Precise:
        """Power of the tone, carrier = 1."""
        return np.asarray(np.square(np.abs(self.line)) / 2)

    @property
    def sigma(self) -> Precise:
        """Standard deviation of phase in rad, of amplitude in parts of it; and nearly that of the frequency in bins."""
        return np.asarray(np.sqrt(self.noise / (2 * self.power)))


def _fit(second: Second, row: Bins, peak: Bins, noise: Precise) -> _Fit:
    """Least-squares fit of a line to the bins around each peak: two Gauss-Newton steps from an interpolation."""
    bins = peak[:, None] + np.arange(-_REACH, _REACH + 1)
    wave = second.audio[row[:, None], bins] * _from_middle(bins)
    frequency = peak + between_bins(*np.abs(wave[:, _REACH - 1 : _REACH + 2]).T)[0]
    for _ in range(2):
        shape, line, rest = _explained(wave, bins, frequency)
        slope = line_shape(frequency[:, None] + 1e-4 - bins) - line_shape(frequency[:, None] - 1e-4 - bins)
        slope /= 2e-4
        # The part of the slope that a change of amplitude would explain is no error of frequency.
        slope -= shape * (_sum(slope * shape) / _sum(np.square(shape)))[:, None]
        step = _sum((np.conj(line)[:, None] * rest).real * slope) / (
            np.square(np.abs(line)) * _sum(np.square(slope))
        )
        frequency = frequency + np.clip(step, -0.5, 0.5)
    _, line, rest = _explained(wave, bins, frequency)
    return _Fit(row, frequency, line, noise, np.asarray(_sum(np.square(np.abs(rest)))))


def _sum(values: Precise) -> Precise:
    return np.asarray(values.sum(axis=1))


def _explained(wave: Lines, bins: Bins, frequency: Precise) -> tuple[Precise, Lines, Lines]:
    """Shape of a line of this frequency, its best amplitude (found,), and what it leaves of the bins."""
    shape = line_shape(frequency[:, None] - bins)
    line = np.asarray((wave * shape).sum(axis=1) / _sum(np.square(shape)))
    return shape, line, np.asarray(wave - line[:, None] * shape)


class SteadyToneMeter:
    """Test tone of at least 5 % depth, 20 Hz to the channel's bandwidth, that stays the same for two seconds.

    It counts only if everything else in the band but its own harmonics and reception noise is 6 dB weaker: of two
    tones (90 and 150 Hz of 20 % each) neither is the test tone, and a tone beside a loud hum is none. Nor is one in
    reception noise of more than its own power, or with anything but noise above -30 dB within 16 Hz.

    SINAD counts reception noise as noise; its power is subtracted from that of the harmonics in THD, which reads 0
    where nothing is left. Over a longer interval the values are those of its last unbroken run of seconds with the
    tone, absent if it ended without one. Intervals shorter than a second have a value only where a second ends.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_tone_hertz",
            "Hz",
            "Frequency of a steady test tone.",
            "Rife and Boorstyn 1974",
            trusted_only=True,
        ),
        Quantity(
            "audio_sinad_db",
            "dB",
            "Signal, noise and distortion over noise and distortion, while a steady test tone is there.",
            "SINAD: ratio of powers; residual of the fitted tone as in AES17",
            trusted_only=True,
        ),
        Quantity(
            "audio_thd_ratio",
            "",
            "Harmonics inside the bandwidth, root-sum-square over the fundamental, while a test tone is there.",
            "THD_F",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._count = len(bank.channels)
        self._bandwidth_hz = bank.channels[0].bandwidth_hz
        bin_hz = bank.rate_hz / (10 * bank.frames)
        self._low = int(np.ceil(LOWEST_HZ / bin_hz - 0.5))
        self._high = int(np.floor(self._bandwidth_hz / bin_hz + 0.5))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._last_bins = np.full(
            self._count, np.nan
        )  # of the second before; NaN where it had no steady line
        self._last_line = np.full(self._count, np.nan + 0j)
        self._begin()

    def _begin(self) -> None:
        self._seconds = np.zeros(self._count)
        self._hertz = np.zeros(self._count)
        self._powers = np.zeros(
            (3, self._count)
        )  # of the tone, of what is left of the band, of the harmonics

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None:
            self._take(detected.second)
        return {}

    def _take(self, second: Second) -> None:
        fit = self._candidates(second)
        powers, steady = self._steady(second, fit)
        row = fit.row[steady]
        hertz, same = self._as_before(fit, row, steady, second.bin_hz)
        run = np.zeros(self._count, bool)
        run[row[same]] = True
        self._seconds = np.where(run, self._seconds + 1, 0)
        self._hertz = np.where(run, self._hertz, 0)
        self._hertz[row[same]] += hertz[same]
        self._powers = np.where(run, self._powers, 0)
        self._powers[:, row[same]] += powers[:, steady][:, same]
        self._last_bins[:] = np.nan
        self._last_bins[row], self._last_line[row] = fit.bins[steady], fit.line[steady]

    def _candidates(self, second: Second) -> _Fit:
        """Rows in which one line holds at least half of what is not reception noise."""
        band = second.audio[:, self._low : self._high + 1]
        power = np.square(band.real) + np.square(band.imag)
        noise = _LINE_POWER * second.audio_noise_density / np.square(second.amplitude) * second.bin_hz
        peak = np.where(second.usable, power.argmax(axis=1), 0)
        line = np.take_along_axis(power, peak[:, None], axis=1)[:, 0]
        rest = power.sum(axis=1, dtype=np.float64) - noise * band.shape[1]
        # The highest bin of a Hann line holds at least 0.48 of its power in the sum of 1.5.
        strong = (line > _CLEAR * noise) & (1.5 * line / 0.72 > rest / 2) & (line > 0.7 * LEAST_DEPTH**2)
        row = np.flatnonzero(second.usable & strong)
        return _fit(second, row, peak[row] + self._low, noise[row])

    def _steady(self, second: Second, fit: _Fit) -> tuple[Precise, Flags]:
        """Powers of tone, residual and harmonics (3, found), and which lines are a steady tone that dominates."""
        bins = np.arange(self._low, self._high + 1)
        rest = np.asarray(
            second.audio[fit.row, self._low : self._high + 1] * _from_middle(bins), np.complex128
        )
        rest -= fit.line[:, None] * line_shape(fit.bins[:, None] - bins)
        rest -= np.conj(fit.line)[:, None] * line_shape(fit.bins[:, None] + bins)
        residual = _sum(np.square(np.abs(rest))) / _LINE_POWER
        harmonics, lifted = self._harmonics(rest, fit)
        noise = fit.noise * len(bins) / _LINE_POWER
        others = residual - harmonics - noise
        near = 2 * (2 * _REACH + 1) * fit.noise
        steady = (fit.moving < _MOVING * 2 * fit.power + near) & (2 * fit.power > LEAST_DEPTH**2)
        steady &= (fit.bins > self._low - 0.5) & (fit.bins < self._high + 0.5)
        steady &= (fit.power > noise) & (others < _OTHERS * fit.power + _NOISE_TRUST * noise)
        return np.array([fit.power, residual, harmonics - lifted]), steady

    def _harmonics(self, rest: Lines, fit: _Fit) -> tuple[Precise, Precise]:
        """Power of the harmonics inside the band, and how much of it reception noise adds on average (found,)."""
        most = int(np.max((self._high + 1) / fit.bins, initial=1))
        order = np.arange(2, max(most, 1) + 1)
        place = fit.bins[:, None] * order
        inside = place <= self._high + 1
        bins = np.rint(np.where(inside, place, self._low)).astype(np.int64)
        bins = bins[:, :, None] + np.arange(-_HARMONIC_REACH, _HARMONIC_REACH + 1)
        known = (bins >= self._low) & (bins <= self._high)
        shape = np.where(known & inside[:, :, None], line_shape(place[:, :, None] - bins), 0)
        whole = np.square(shape).sum(axis=2)
        weight = shape / np.where(whole > 0, whole, 1)[:, :, None]
        found = rest[np.arange(len(rest))[:, None, None], np.clip(bins, self._low, self._high) - self._low]
        line = (weight * found).sum(axis=2)
        gain = np.einsum("fob,bc,foc->f", weight, _COVARIANCE, weight)
        return _sum(np.square(np.abs(line))) / 2, np.asarray(gain * fit.noise / 2)

    def _as_before(self, fit: _Fit, row: Bins, steady: Flags, bin_hz: float) -> tuple[Precise, Flags]:
        """Frequency in Hz from the phase's advance since the second before, and whether nothing has changed.

        Phases at the middles of two seconds, each from a Hann window squared (its noise bandwidth is 35/18 bins), tell
        the frequency with 1.6 times the standard deviation of the Cramer-Rao bound for both seconds together (0.57
        times that for one); the fitted frequencies tell which turn it is.
        """
        last_bins, last_line = self._last_bins[row], self._last_line[row]
        bins, line, sigma = fit.bins[steady], fit.line[steady], fit.sigma[steady]
        advance = np.angle(line * np.conj(last_line)) / (2 * np.pi)
        mean = (bins + last_bins) / 2
        exact = np.rint(mean - advance) + advance
        reach = _DRIFT_HZ / bin_hz + _SIGMAS * np.sqrt(2) * sigma
        same = (np.abs(bins - last_bins) < reach) & (np.abs(exact - mean) < reach)
        same &= np.abs(np.abs(last_line / line) - 1) < _SWELL + _SIGMAS * np.sqrt(2) * sigma
        return exact * bin_hz, np.asarray(same)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        there = self._seconds > 0
        seconds = np.where(there, self._seconds, np.nan)
        tone, residual, harmonics = np.where(there, self._powers, np.nan)
        hertz = self._hertz / seconds
        distorted = np.where(2 * hertz <= self._bandwidth_hz + 1, np.maximum(harmonics, 0) / tone, np.nan)
        self._begin()
        return {
            "audio_tone_hertz": hertz,
            "audio_sinad_db": 10 * np.log10((tone + residual) / residual),
            "audio_thd_ratio": np.sqrt(distorted),
        }


def _covariance() -> Precise:
    """Of the bins of a harmonic in white noise, re the power of one."""
    bins = np.arange(2 * _HARMONIC_REACH + 1)
    apart = np.abs(bins[:, None] - bins)
    lags = np.concatenate([_HANN_COVARIANCE, np.zeros(len(bins))])
    return np.asarray(lags[apart])


_COVARIANCE = _covariance()
