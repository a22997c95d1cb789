"""Something else lives in quadrature: stereo, digital sidebands, phase keying. What is there is no reception noise.

Reception noise is flat; what follows the programme is incidental phase. What is left is told where it is 3 % of the
carrier or more, and far above the quietest quarter of the band. The noise then comes from that quarter
(detect/noise.py), and readings that rest on it are marked.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Fault, Precise, Second
from monitord.measure.coherence import LINE_POWER, Bands
from monitord.quantities import Quantity
from monitord.stage import Bank

_LEAST_RMS = 0.03
_UNEVEN = 4.0  # 6 dB
_QUARTERS = 4


class QuadratureSignalMeter:
    """Raises the fault for the second after one in which it was seen."""

    quantities: tuple[Quantity, ...] = ()

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._channels = len(bank.channels)
        # There the audio itself is in quadrature too.
        self._one_sideband = bank.channels[0].detector.endswith(("sideband", "suppressed-carrier"))
        self._bands = Bands(bank)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._seen = np.zeros(self._channels, bool)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None and not self._one_sideband:
            self._judge(detected.second)
        return {"faults": np.where(self._seen, int(Fault.QUADRATURE_SIGNAL), 0)}

    def _judge(self, second: Second) -> None:
        rest = self._bands.of(second).rest
        mean = rest.mean(axis=1)
        rms = np.sqrt(np.maximum(mean * self._bands.width_hz / second.bin_hz / LINE_POWER, 0))
        quarters = np.array_split(rest, min(_QUARTERS, self._bands.count), axis=1)
        quietest = np.min([np.median(quarter, axis=1) for quarter in quarters], axis=0)
        self._seen = second.usable & (rms > _LEAST_RMS) & (mean > _UNEVEN * quietest)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        return {}
