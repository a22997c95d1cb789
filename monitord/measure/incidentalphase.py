"""Incidental phase modulation: the phase that follows the programme, told from noise by its coherence with it.

With z = (1 + m) exp(j phi) and phi = h * m, quadrature is (1 + m)(phi + c): c is where the carrier loop has turned the
mean of z to phase 0, and adds c m to what follows m. The transfer from m to quadrature, band by band, is therefore
H + c, and since the mean of quadrature is zero, c (1 - E[m^2]) = - sum of Re(H + c) S with S the power of m in a band.
Phase that goes with m^2, or with nothing, is not seen; what is slower than 20 Hz the loop takes for the carrier's own.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise, Second
from monitord.measure.coherence import EXPLAINED_BINS, LINE_POWER, Bands
from monitord.quantities import Quantity
from monitord.stage import Bank


class IncidentalPhaseMeter:
    """Rms over the interval's seconds, rad; 0 where nothing stands out of the noise, absent without programme."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "incidental_phase_radians",
            "rad",
            "Rms phase modulation that follows the programme.",
            "CHECKS E19",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._channels = len(bank.channels)
        self._bands = Bands(bank)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._square = np.zeros(self._channels)
        self._seconds = np.zeros(self._channels)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None:
            square = self._phase_square(detected.second)
            known = detected.second.usable & np.isfinite(square)
            self._square += np.where(known, square, 0)
            self._seconds += known
        return {}

    def _phase_square(self, second: Second) -> Precise:
        """Mean square of the phase that follows the programme (channels,); NaN without programme."""
        seen = self._bands.of(second)
        follows = seen.transfer != 0
        power = np.where(follows, seen.power, 0)
        loop = (seen.transfer.real * power).sum(axis=1) / np.maximum(1 - power.sum(axis=1), 0.1)
        phase = np.square(np.abs(seen.transfer + loop[:, None])) * power
        phase -= follows * (EXPLAINED_BINS / LINE_POWER * seen.noise[:, None])
        return np.where(follows.any(axis=1), phase.sum(axis=1), np.nan)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        known = self._seconds > 0
        mean = np.where(known, self._square / np.maximum(self._seconds, 1), np.nan)
        self.reset()
        return {"incidental_phase_radians": np.sqrt(np.maximum(mean, 0))}
