"""Envelope detector: the magnitude. It folds where the carrier reverses, and distorts where a sideband is missing.

The carrier is recovered all the same: level, frequency and noise come from it, and it is what depth refers to.
"""

import numpy as np

from monitord.blocks import Baseband, Complex, Detected, Real
from monitord.detect.carrier import CarrierRecovery
from monitord.stage import Bank


def magnitude(_: Complex, raw: Complex) -> Real:
    """The magnitude of the baseband."""
    return np.abs(raw)


class EnvelopeDetector:
    """Magnitude of the baseband, in units of the carrier."""

    delay_s = 0.0

    def prepare(self, bank: Bank) -> None:
        """See stage.Detector."""
        self._recovery = CarrierRecovery(bank)

    def process(self, baseband: Baseband) -> Detected:
        """See stage.Detector."""
        return self._recovery.process(baseband, magnitude)

    def reset(self) -> None:
        """See stage.Detector."""
        self._recovery.reset()
