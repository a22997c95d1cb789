"""Product detector with recovered carrier: multiply by the carrier's cosine and keep what is in phase."""

from monitord.blocks import Baseband, Complex, Detected, Real
from monitord.detect.carrier import CarrierRecovery
from monitord.stage import Bank


def in_phase(turned: Complex, _: Complex) -> Real:
    """The real part of the baseband turned to the carrier's phase."""
    return turned.real


class SynchronousDetector:
    """In-phase part of the carrier-locked baseband: linear down to and through zero."""

    delay_s = 0.0

    def prepare(self, bank: Bank) -> None:
        """See stage.Detector."""
        self._recovery = CarrierRecovery(bank)

    def process(self, baseband: Baseband) -> Detected:
        """See stage.Detector."""
        return self._recovery.process(baseband, in_phase)

    def reset(self) -> None:
        """See stage.Detector."""
        self._recovery.reset()
