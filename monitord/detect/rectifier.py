"""Rectifier with R and C, as in a listener's set: charged at once to the envelope's crest, discharged through R.

y[n] = max(x[n], a y[n-1]) with a = exp(-1 / (rate RC)). In the logarithm the discharge is a straight line, and the
recursion a running maximum: log y[n] + n / (rate RC) = max over k <= n of (log x[k] + k / (rate RC)). Where RC is
longer than sqrt(1 - m^2) / (m w) the capacitor cannot follow a tone of depth m and angular frequency w down its
slope: diagonal clipping (handbook; CHECKS E3).

As for the envelope detector the carrier is recovered all the same, and depth refers to it.
"""

import numpy as np

from monitord.blocks import Baseband, Complex, Detected, Precise, Real
from monitord.detect.carrier import CarrierRecovery
from monitord.stage import Bank

_EMPTY = -1e3  # logarithm of a capacitor without charge: keeps the arithmetic finite


class PeakFollower:
    """Capacitors of some rows; they keep their charge from hop to hop."""

    def __init__(self, time_constants_s: Precise, rate_hz: float, frames: int) -> None:
        """time_constants_s: RC of each row (channels,)."""
        self._slope = np.arange(1, frames + 1) / (rate_hz * time_constants_s[:, None])
        self.reset()

    def reset(self) -> None:
        """Without charge: as new."""
        self._charge = np.full(len(self._slope), _EMPTY)

    def follow(self, envelope: Real) -> Real:
        """Voltage of the capacitors over one hop; both float32 (channels, frames), envelope >= 0."""
        level = np.full(envelope.shape, _EMPTY)
        np.log(envelope, out=level, where=envelope > 0, casting="same_kind")
        level += self._slope
        level[:, 0] = np.maximum(level[:, 0], self._charge)
        np.maximum.accumulate(level, axis=1, out=level)
        level -= self._slope
        self._charge = level[:, -1].copy()
        return np.asarray(np.exp(level), np.float32)


class RectifierDetector:
    """Envelope through a rectifier with R and C, in units of the carrier."""

    delay_s = 0.0

    def prepare(self, bank: Bank) -> None:
        """See stage.Detector."""
        self._recovery = CarrierRecovery(bank)
        time_constants_s = np.array([channel.time_constant_s for channel in bank.channels])
        self._follower = PeakFollower(time_constants_s, bank.rate_hz, bank.frames)

    def process(self, baseband: Baseband) -> Detected:
        """See stage.Detector."""
        return self._recovery.process(baseband, self._rectified)

    def _rectified(self, _: Complex, raw: Complex) -> Real:
        return self._follower.follow(np.abs(raw))

    def reset(self) -> None:
        """See stage.Detector."""
        self._recovery.reset()
        self._follower.reset()
