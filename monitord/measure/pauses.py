"""Programme pauses: seconds in which nothing is left of the modulation but hum and steady noise.

A second is a pause when its modulation without the reception noise and without lines of the mains is below -30 dB
re 100 %, and its tenths are alike: programme that fades away, speech and soft music are louder in some than in
others. Hum of any depth is so let through, unless it is a single deep line, which is taken for a test tone.
What was measured in pauses is kept for ten minutes.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Complex, Flags, Precise, Second
from monitord.detect.seconds import HOPS
from monitord.measure.mainslines import Hum, MainsLines, Rows
from monitord.stage import Bank

FULL_POWER = 0.5  # mean square of a sine of 100 %
LEAST_POWER = FULL_POWER * 1e-12  # -120 dB: what single precision leaves comes from no station
LOWEST_HZ = 20.0
LINE_POWER = 3.0  # a Hann line of amplitude a: its bins' squares sum to 1.5 a^2, its power is a^2 / 2
PAUSE_POWER = FULL_POWER * 10 ** (-30 / 10)
LEAST_TONE = 0.05  # depth of a test tone; residual hum and noise stay below it
_CANDIDATE_POWER = FULL_POWER * 10 ** (-16 / 10)  # no hum is deeper; what is louder is not looked at
_ALIKE = 0.25  # how far the strongest tenth may stand above their mean: 1 dB
_SCATTER = 3.5  # and that many standard deviations of white noise in a tenth

KEPT = 10  # seconds
KEPT_FOR_S = 600.0


def audio_band(bank: Bank) -> tuple[slice, Precise]:
    """The bins of `Second.audio` from 20 Hz to the channels' bandwidth, and their frequencies in Hz."""
    bin_hz = bin_spacing_hz(bank)
    low = int(np.ceil(LOWEST_HZ / bin_hz))
    high = int(np.floor(bank.channels[0].bandwidth_hz / bin_hz)) + 1
    return slice(low, high), np.asarray(np.arange(low, high) * bin_hz, np.float64)


def bin_spacing_hz(bank: Bank) -> float:
    """Spacing of the bins of `Second.audio`."""
    return bank.rate_hz / (HOPS * bank.frames)


def powers(spectrum: Complex) -> Precise:
    """Squared magnitudes, float64."""
    return np.square(spectrum.real, dtype=np.float64) + np.square(spectrum.imag, dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Pauses:
    """The channels that pause: their rows, and the hum in each of these."""

    rows: Rows
    hum: Hum


class PauseJudge:
    """Finds the channels of one bank that pause. Keeps who had a carrier in the second before."""

    def __init__(self, bank: Bank, lines: MainsLines) -> None:
        self._bank = bank
        self._lines = lines
        self._band, _ = audio_band(bank)
        self._band_hz = (self._band.stop - self._band.start) * bin_spacing_hz(bank)
        self._scatter = _SCATTER / np.sqrt(bank.noise_hz * bank.hop_s)  # 2 B T degrees of freedom
        self._held = np.zeros(len(bank.channels), bool)

    def find(self, second: Second) -> Pauses:
        """Judge one second; each second of the bank must be shown, in order."""
        density = second.audio_noise_density / np.square(second.amplitude)
        band = second.audio[:, self._band]
        parts = band.view(np.float32)
        power = np.einsum("cp,cp->c", parts, parts) / LINE_POWER - density * self._band_hz
        # What has just come on the air is still settling.
        rows = np.flatnonzero(second.usable & self._held & (power < _CANDIDATE_POWER))
        self._held = second.usable
        hum = self._lines.find(second.audio[rows], rows, np.full(len(rows), np.nan))
        without_hum = power[rows] - np.where(hum.clear, hum.power, 0)
        quiet = (without_hum < PAUSE_POWER) & self._alike(second, rows, density[rows])
        quiet &= ~self._lone_line(band[rows], power[rows])
        return Pauses(rows[quiet], Hum(hum.power[quiet], hum.known[quiet], hum.clear[quiet]))

    def _alike(self, second: Second, rows: Rows, density: Precise) -> Flags:
        """The tenths of the second are equally strong, high notes too, as far as noise lets it be seen (rows,)."""
        waves = second.in_phase[rows].reshape(len(rows), HOPS, self._bank.frames)
        all_of_it, high = waves.var(axis=2), np.diff(waves, axis=2).var(axis=2)
        mean = all_of_it.mean(axis=1, dtype=np.float64)
        noise = density * self._bank.noise_hz
        own = 1 - noise / np.maximum(mean, noise)
        most = 1 + _ALIKE * own + self._scatter
        return np.asarray(
            (all_of_it.max(axis=1) < most * mean) & (high.max(axis=1) < most * high.mean(axis=1))
        )

    def _lone_line(self, band: Complex, power: Precise) -> Flags:
        """A line as deep as a test tone stands alone: without it there is hardly anything (rows,)."""
        line = powers(band)
        peak = line.argmax(axis=1)[:, None]
        own = np.where(np.abs(np.arange(line.shape[1]) - peak) <= 2, line, 0).sum(axis=1) / LINE_POWER
        return np.asarray((own > LEAST_TONE**2 / 2) & (power - own < PAUSE_POWER))


class NewestSeconds:
    """What was measured in the newest ten seconds of each channel, for ten minutes."""

    def __init__(self, channels: int, values: int) -> None:
        """Keep `values` numbers of each second."""
        self._values = np.zeros((KEPT, channels, values))
        self._time_s = np.full((KEPT, channels), -np.inf)
        self._place = np.zeros(channels, np.int64)

    def add(self, rows: Rows, values: Precise, time_s: float) -> None:
        """One second of some channels, values (rows, values), that ended at `time_s`."""
        place = self._place[rows]
        self._values[place, rows] = values
        self._time_s[place, rows] = time_s
        self._place[rows] = (place + 1) % KEPT

    def sums(self, now_s: float) -> tuple[Precise, NDArray[np.int64]]:
        """Sums of what is not too old (channels, values), and of how many seconds (channels,)."""
        valid = self._time_s > now_s - KEPT_FOR_S
        return np.where(valid[:, :, None], self._values, 0).sum(axis=0), valid.sum(axis=0)
