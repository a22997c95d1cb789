"""How far envelope and synchronous detection disagree: they do where a sideband is missing, weak or turned.

For symmetrical sidebands the envelope is |1 + m|, reversed peaks and all. Whatever stands in quadrature (Q) lifts it by
about Q^2 / 2(1 + m). Reception noise of variance s^2 in quadrature leaves sqrt(3)/2 s^2: 0.0025 at C/N0 60 dB-Hz in
+-5 kHz, a hundredth of that at 80; it is not subtracted.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise
from monitord.quantities import Quantity
from monitord.stage import Bank


class DisagreementMeter:
    """Rms of (envelope - |1 + m|) over the interval, the carrier = 1."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "detector_disagreement_ratio",
            "",
            "Rms difference of envelope and rectified synchronous detection, re the carrier.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._channels = len(bank.channels)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._square = np.zeros(self._channels)
        self._hops = np.zeros(self._channels)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = detected.settled & ~detected.broken
        difference = np.abs(detected.coherent)
        difference -= np.abs(detected.coherent.real)
        square = np.einsum("cf,cf->c", difference, difference) / difference.shape[1]
        self._square += np.where(usable, square, 0)
        self._hops += usable
        return {}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        known = self._hops > 0
        mean = np.where(known, self._square / np.maximum(self._hops, 1), np.nan)
        self.reset()
        return {"detector_disagreement_ratio": np.sqrt(mean)}
