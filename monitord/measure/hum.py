"""Hum: root-sum-square of lines 1 to 8 of the mains, in programme pauses or under a steady test tone."""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Flags, Precise, Second
from monitord.measure.hannline import between_bins
from monitord.measure.mainslines import MainsLines, Rows
from monitord.measure.pauses import (
    FULL_POWER,
    LEAST_POWER,
    LEAST_TONE,
    LINE_POWER,
    PAUSE_POWER,
    NewestSeconds,
    PauseJudge,
    audio_band,
    bin_spacing_hz,
    powers,
)
from monitord.quantities import Quantity
from monitord.stage import Bank

LEAST_SECONDS = 2
_TONE_REACH = 4.0  # bins on each side that belong to the tone
_DRIFT_BINS, _SWELL = 0.05, 0.01  # from second to second


class SteadyTone:
    """Finds rows in which there is nothing but a steady tone and its harmonics, to measure the hum under it.

    What else there is must be below -30 dB re 100 %, as in a pause, and frequency and level as in the second before.
    """

    def __init__(self, bank: Bank) -> None:
        self._band, hz = audio_band(bank)
        self._place = hz / bin_spacing_hz(bank)
        self._bin_hz = bin_spacing_hz(bank)
        self._last = np.full((2, len(bank.channels)), np.nan)  # frequency in bins, amplitude

    def find(self, second: Second) -> tuple[Rows, Precise]:
        """Rows with a steady tone, and its frequency in Hz in each; each second must be shown, in order."""
        band = second.audio[:, self._band]
        power = np.square(band.real) + np.square(band.imag)
        noise = LINE_POWER * second.audio_noise_density / np.square(second.amplitude) * self._bin_hz
        whole = power.sum(axis=1)
        peak = np.where(second.usable, power.argmax(axis=1), 0)
        line = np.take_along_axis(power, peak[:, None], axis=1)[:, 0]
        # The highest bin of a Hann line holds half of its power at least, and 0.7 of its amplitude squared.
        rows = np.flatnonzero(second.usable & (line > 0.7 * LEAST_TONE**2) & (line > 0.3 * whole))
        rows = rows[(peak[rows] > 0) & (peak[rows] < power.shape[1] - 1)]
        around = np.sqrt(power[rows[:, None], peak[rows][:, None] + np.array([-1, 0, 1])])
        away, amplitude = between_bins(*around.T)
        place = peak[rows] + away + self._place[0]
        others = (self._others(powers(band[rows]), place) - noise[rows] * band.shape[1]) / LINE_POWER
        steady = self._as_before(rows, place, amplitude) & (others < PAUSE_POWER)
        self._last[:] = np.nan
        self._last[:, rows] = place, amplitude
        return rows[steady], place[steady] * self._bin_hz

    def _others(self, power: Precise, place: Precise) -> Precise:
        """Sum over the bins that no harmonic is near to (rows,)."""
        harmonic = np.maximum(np.rint(self._place / place[:, None]), 1)
        away = np.abs(self._place - harmonic * place[:, None]) > _TONE_REACH
        return np.asarray((power * away).sum(axis=1))

    def _as_before(self, rows: Rows, place: Precise, amplitude: Precise) -> Flags:
        last_place, last_amplitude = self._last[:, rows]
        same = np.abs(place - last_place) < _DRIFT_BINS
        return np.asarray(same & (np.abs(amplitude / last_amplitude - 1) < _SWELL))


class HumMeter:
    """Hum of the last ten seconds of pause or test tone, dB re the rms of a 100 % sine; absent ten minutes after them.

    At least two seconds must have been heard, and in half of them at least a line must stand clear of the noise.
    Lines within 10 Hz of the tone or of one of its harmonics are left out. A single line of 5 % and more, all alone,
    is a test tone even at 100 Hz. A supply that hums modulates tone and carrier alike: at a tone that is a multiple
    of the mains, what it adds on both sides of the tone falls on lines of the hum and is counted with them.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_hum_db",
            "dB",
            "Root-sum-square of lines 1 to 8 of the mains, in pauses or under a test tone, re 100 % modulation.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._lines = MainsLines(bank.channels, bin_spacing_hz(bank))
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._judge = PauseJudge(self._bank, self._lines)
        self._tone = SteadyTone(self._bank)
        self._kept = NewestSeconds(len(self._bank.channels), 2)  # power of the hum, and 1 where it is clear
        self._now_s = 0.0
        self._begin()

    def _begin(self) -> None:
        self._heard = np.zeros(len(self._bank.channels), bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        self._now_s = detected.span.elapsed_s
        self._heard |= detected.settled
        if detected.second is not None:
            self._take(detected.second)
        return {}

    def _take(self, second: Second) -> None:
        pauses = self._judge.find(second)
        self._kept.add(pauses.rows, np.stack([pauses.hum.power, pauses.hum.clear], axis=1), self._now_s)
        rows, tone_hz = self._tone.find(second)
        hum = self._lines.find(second.audio[rows], rows, tone_hz)
        use = hum.known & ~np.isin(rows, pauses.rows)  # a deep line among others of the mains is no tone
        self._kept.add(rows[use], np.stack([hum.power, hum.clear], axis=1)[use], self._now_s)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        sums, seconds = self._kept.sums(self._now_s)
        power, clear = sums.T
        power = power / np.maximum(seconds, 1)
        known = self._heard & (seconds >= LEAST_SECONDS) & (2 * clear >= seconds) & (power > LEAST_POWER)
        self._begin()
        level_db = np.full(known.shape, np.nan)
        np.log10(power / FULL_POWER, out=level_db, where=known)
        return {"audio_hum_db": 10 * level_db}
