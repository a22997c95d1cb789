"""One sideband beside its carrier, by phasing: in phase less or plus the Hilbert transform of quadrature.

Of a component a exp(j w t) above the carrier, in phase is a cos, quadrature a sin, whose Hilbert transform is -a cos:
their difference is twice the upper sideband and none of the lower. Double-sideband AM, which has nothing in quadrature,
comes out unchanged, so that its depth reads the same. Below the transformer's transition both sidebands count.

The transformer is a Kaiser-windowed FIR of type III; it looks ahead by half its length, and in phase waits for it.
"""

from dataclasses import replace

import numpy as np
import scipy.fft

from monitord.blocks import Baseband, Complex, Detected, Precise, Real
from monitord.detect.carrier import CarrierRecovery
from monitord.stage import Bank

REJECTION_DB = 70.0
LOWEST_HZ = 100.0


def hilbert_taps(reach: int) -> Precise:
    """2 / (pi n) at odd n within `reach`, tapered: float64 (2 reach + 1,). Kaiser's beta (1974) for REJECTION_DB."""
    place = np.arange(-reach, reach + 1)
    ideal = np.where(place % 2 == 1, 2 / (np.pi * np.where(place == 0, 1, place)), 0.0)
    return np.asarray(ideal * np.kaiser(len(place), 0.1102 * (REJECTION_DB - 8.7)))


def reach_for(lowest_hz: float, rate_hz: float) -> int:
    """Half the length of a transformer that is flat from `lowest_hz` on (Kaiser 1974: N ~ (A - 7.95) / 14.36 df)."""
    return int(np.ceil((REJECTION_DB - 7.95) / 14.36 * rate_hz / (2 * lowest_hz) / 2)) + 1


class Phasing:
    """Keeps one sideband of hops that follow each other; the result lags by `reach` samples."""

    def __init__(self, channels: int, frames: int, reach: int, sign: float) -> None:
        """sign: +1 for the upper sideband, -1 for the lower."""
        self.reach = reach
        self._size = int(scipy.fft.next_fast_len(frames + 2 * reach, real=True))
        self._response = scipy.fft.rfft(-sign * hilbert_taps(reach), self._size).astype(np.complex64)
        self._wave: Complex = np.zeros((channels, frames + 2 * reach), np.complex64)
        self._frames = frames

    def reset(self) -> None:
        """Forget what came before: as new."""
        self._wave[:] = 0

    def keep(self, turned: Complex) -> Real:
        """The sideband and the carrier of the last `frames` samples but `reach`, float32 (channels, frames)."""
        edge = 2 * self.reach
        self._wave[:, :edge] = self._wave[:, -edge:]
        self._wave[:, edge:] = turned
        spectrum = scipy.fft.rfft(self._wave.imag, self._size, axis=1)
        spectrum *= self._response
        shifted = scipy.fft.irfft(spectrum, self._size, axis=1)[:, edge : edge + self._frames]
        return np.asarray(self._wave.real[:, self.reach : self.reach + self._frames] + shifted, np.float32)


class SidebandDetector:
    """Carrier recovered, one sideband detected. Its audio lags by `delay_s`; noise of both quadratures is in it."""

    _sign: float

    def prepare(self, bank: Bank) -> None:
        """See stage.Detector."""
        lowest_hz = min(LOWEST_HZ, bank.channels[0].bandwidth_hz / 10)
        reach = min(reach_for(lowest_hz, bank.rate_hz), bank.frames // 2)
        self.delay_s = reach / bank.rate_hz
        self._recovery = CarrierRecovery(bank, self._sign, noise_gain=2.0, delay_s=self.delay_s)
        self._phasing = Phasing(len(bank.channels), bank.frames, reach, self._sign)
        self._broken = np.zeros(len(bank.channels), bool)

    def process(self, baseband: Baseband) -> Detected:
        """See stage.Detector."""
        detected = self._recovery.process(baseband, lambda turned, _: self._phasing.keep(turned))
        broken, self._broken = (
            detected.broken | self._broken,
            detected.broken,
        )  # its end comes with the next hop
        return replace(detected, broken=broken)

    def reset(self) -> None:
        """See stage.Detector."""
        self._recovery.reset()
        self._phasing.reset()
        self._broken[:] = False


class UpperSidebandDetector(SidebandDetector):
    """The sideband above the carrier."""

    _sign = 1.0


class LowerSidebandDetector(SidebandDetector):
    """The sideband below the carrier."""

    _sign = -1.0
