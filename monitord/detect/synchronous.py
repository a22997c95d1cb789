"""Product detector with recovered carrier: multiply by the carrier's cosine and keep what is in phase."""

import numpy as np

from monitord.blocks import Baseband, Detected, Real
from monitord.detect.carrier import Carrier, CarrierRecovery
from monitord.stage import Bank


def scaled(carrier: Carrier, in_phase: Real) -> Detected:
    """The hop with the carrier scaled to 1; rows without a carrier become NaN.

    in_phase: float32 (channels, frames), full scale = 1.
    """
    scale = (1 / carrier.amplitude).astype(np.float32)[:, None]
    return Detected(
        in_phase=in_phase * scale,
        quadrature=carrier.samples.imag * scale,
        rate_hz=carrier.rate_hz,
        span=carrier.span,
        amplitude=carrier.amplitude,
        hop_amplitude=carrier.hop_amplitude,
        noise_density=carrier.noise_density,
        sigma=carrier.sigma,
        phase=carrier.phase,
        offset_hz=carrier.offset_hz,
        searched=carrier.searched,
        locked=carrier.locked,
        settled=carrier.settled,
        broken=carrier.broken,
    )


class SynchronousDetector:
    """In-phase part of the carrier-locked baseband: linear down to and through zero."""

    delay_s = 0.0

    def prepare(self, bank: Bank) -> None:
        """See stage.Detector."""
        self._recovery = CarrierRecovery(bank)

    def process(self, baseband: Baseband) -> Detected:
        """See stage.Detector."""
        carrier = self._recovery.process(baseband)
        return scaled(carrier, carrier.samples.real)

    def reset(self) -> None:
        """See stage.Detector."""
        self._recovery.reset()
