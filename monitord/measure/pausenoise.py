"""The station's own noise: what is left in phase while the programme pauses, less what the reception adds.

Reception noise, impulses and other stations are as strong in quadrature as in phase, so the quadrature's power, bin
by bin under the same weighting, is what they add. Near the carrier the quadrature also holds the phase noise and
phase hum of oscillators, which are not in phase; there the flat density of the reception noise is taken instead.
What the subtraction cannot tell from its own scatter is not told.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import BIN_POWER, Detected, Precise, Second
from monitord.measure.mainslines import MainsLines
from monitord.measure.pauses import (
    FULL_POWER,
    LEAST_POWER,
    LINE_POWER,
    NewestSeconds,
    PauseJudge,
    audio_band,
    bin_spacing_hz,
    powers,
)
from monitord.measure.weighting import a_weighting, bs468_weighting
from monitord.quantities import Quantity
from monitord.stage import Bank

WEIGHTINGS = ("a", "bs468")
_CLEAR_SIGMAS = 3.0
_CLEAR_OF_CARRIER_HZ = 510.0  # beyond the 8th line of the mains
_HANN_SPREAD = 35 / 18  # variance of a sum of bins, correlated by 4/9 and 1/36, over that of independent ones


class PauseNoiseMeter:
    """Noise and hum of the last ten seconds of pause, dB re the rms of a 100 % sine; absent ten minutes after them.

    A value stands only where the residue is more than 3 standard deviations of the subtraction above zero: in a
    channel of 5 kHz, 15 dB below the reception noise after ten seconds, 10 dB after one.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_noise_db",
            "dB",
            "Noise and hum in programme pauses, unweighted, reception noise subtracted, re 100 % modulation.",
            "DESIGN 4",
            trusted_only=True,
        ),
        Quantity(
            "audio_weighted_noise_db",
            "dB",
            "The same, weighted, rms.",
            "IEC 61672-1 (A); ITU-R BS.468-4 (its weighting, rms)",
            trusted_only=True,
            label="weighting",
            keys=WEIGHTINGS,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        self._lines = MainsLines(bank.channels, bin_spacing_hz(bank))
        self._band, hz = audio_band(bank)
        curves = np.array([np.ones(hz.shape), a_weighting(hz), bs468_weighting(hz)])
        self._weights = np.square(curves.T) / LINE_POWER
        clear_hz = min(_CLEAR_OF_CARRIER_HZ, bank.channels[0].bandwidth_hz / 2)
        self._flat = np.where((hz < clear_hz)[:, None], self._weights, 0)
        self._bin_power = BIN_POWER / 2 * bin_spacing_hz(bank)  # of one-sided density 1 per Hz
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._judge = PauseJudge(self._bank, self._lines)
        self._kept = NewestSeconds(count, 2 * self._weights.shape[1])
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
        rows = self._judge.find(second).rows
        if not len(rows):
            return
        in_phase = powers(second.audio[rows, self._band])
        quadrature = powers(second.quadrature[rows, self._band])
        density = second.audio_noise_density[rows] / np.square(second.amplitude[rows])
        flat = self._bin_power * density[:, None]
        own_weights = self._weights - self._flat
        residue = in_phase @ self._weights - quadrature @ own_weights - flat * self._flat.sum(axis=0)
        # A bin of noise has the variance of its mean power squared, and E[q^2] is twice that: in phase and quadrature.
        variance = np.square(quadrature) @ np.square(own_weights)
        variance += np.square(flat) * np.square(self._flat).sum(axis=0)
        self._kept.add(rows, np.concatenate([residue, _HANN_SPREAD * variance], axis=1), self._now_s)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        sums, seconds = self._kept.sums(self._now_s)
        residue, variance = np.split(sums, 2, axis=1)
        known = self._heard & (seconds > 0)
        self._begin()
        clear = residue > np.maximum(
            _CLEAR_SIGMAS * np.sqrt(variance), LEAST_POWER * np.maximum(seconds, 1)[:, None]
        )
        ratio = residue / (FULL_POWER * np.maximum(seconds, 1)[:, None])
        level_db = np.full(ratio.shape, np.nan)
        np.log10(ratio, out=level_db, where=clear & known[:, None])
        return {"audio_noise_db": 10 * level_db[:, 0], "audio_weighted_noise_db": 10 * level_db[:, 1:]}
