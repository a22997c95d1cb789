"""The quasi-peak reading of BS.468-4 in programme pauses: for recordings only, as it steps through single samples."""

from collections.abc import Mapping

import numpy as np
import scipy.fft

from monitord.blocks import Detected, Precise, Real, Second
from monitord.measure.mainslines import MainsLines
from monitord.measure.pauses import FULL_POWER, NewestSeconds, PauseJudge, bin_spacing_hz
from monitord.measure.weighting import bs468_network, quasi_peak
from monitord.quantities import Quantity
from monitord.stage import Bank

LEAST_RATE_HZ = 24_000.0  # below it the charge of 1.4 ms would miss what stands between the samples
_LEAST_OVER = 10 ** (8 / 10)
_ONSET_S = 0.005  # the network's answer to the beginning of the second: its slowest pole has 0.05 ms


class QuasiPeakMeter:
    """Weighted quasi-peak noise of the last ten seconds of pause, dB re 100 %; a sine reads its rms.

    The pointer is read at the end of each second. Reception noise is taken off by squares, as the quadrature shows it.
    That is exact where both are normal noise; a line in the reception noise then reads too high, by 0.2 dB where that
    reads 20 dB less than the line, by 1.1 dB at 8 dB less. Nearer than 8 dB nothing is told.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_quasi_peak_noise_db",
            "dB",
            "Noise and hum in programme pauses, weighted, quasi-peak, reception noise subtracted, re 100 % modulation.",
            "ITU-R BS.468-4",
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
        count = len(self._bank.channels)
        self._judge = PauseJudge(self._bank, self._lines)
        self._kept = NewestSeconds(count, 2)  # squares of what stands in phase and in quadrature
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
        waves = np.concatenate([second.in_phase[rows] - 1, second.coherent.imag[rows]])
        shown = self._shown(waves, second.rate_hz)
        self._kept.add(rows, np.square(shown).reshape(2, -1).T, self._now_s)

    def _shown(self, waves: Real, rate_hz: float) -> Precise:
        """Where the pointer stands at each wave's end, through the network and the channel's bandwidth (waves,)."""
        frames = waves.shape[1]
        padded = frames + self._bank.frames  # a hop of silence keeps the end of the second from its beginning
        dense = int(np.ceil(LEAST_RATE_HZ / rate_hz))
        hz = scipy.fft.rfftfreq(padded, 1 / rate_hz)
        network = np.where(hz <= self._bank.channels[0].bandwidth_hz, bs468_network(hz), 0)
        spectrum = scipy.fft.rfft(waves.astype(np.float64), padded, axis=1) * network
        weighted = dense * scipy.fft.irfft(spectrum, padded * dense, axis=1)
        onset = int(np.ceil(_ONSET_S * rate_hz))
        return np.asarray(quasi_peak(weighted[:, onset * dense : frames * dense], rate_hz * dense)[:, -1])

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        sums, seconds = self._kept.sums(self._now_s)
        in_phase, quadrature = sums.T
        own = in_phase - quadrature
        known = self._heard & (seconds > 0) & (own > _LEAST_OVER * quadrature)
        self._begin()
        level_db = np.full(known.shape, np.nan)
        np.log10(own / (FULL_POWER * np.maximum(seconds, 1)), out=level_db, where=known)
        return {"audio_quasi_peak_noise_db": 10 * level_db}
