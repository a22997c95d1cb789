"""What depth refers to: the carrier that is there, or the one without modulation (47 CFR 73.14's C).

A transmitter that cuts off shifts its mean carrier; measured against the mean, its depth reads too low. The
unmodulated carrier is that of the last programme pause; until one has been heard, the present carrier stands in.
"""

import numpy as np

from monitord.blocks import Flags, Precise
from monitord.detect.averaging import BRIEF_HOPS
from monitord.stage import Bank

PAUSE_POWER = 0.03**2
"""Mean square of the modulation below which a hop is a programme pause: -27 dB re a sine of 100 %."""


class DepthReference:
    """The amplitude that depth refers to, in each row of a bank."""

    def __init__(self, bank: Bank) -> None:
        count = len(bank.channels)
        self._unmodulated = np.array([one.depth_reference == "unmodulated" for one in bank.channels])
        self._pausing = np.zeros(count, np.int64)
        self._carrier = np.full(count, np.nan)

    def amplitude(self, present: Precise, brief: Precise, modulation: Precise, steady: Flags) -> Precise:
        """The reference after this hop, full scale = 1 (channels,).

        present, brief: the carrier's mean over the averaging time, and over the last half second; modulation: mean
        square of m in this hop, noise subtracted; steady: the carrier was held unbroken (channels,).
        """
        if not self._unmodulated.any():
            return present
        self._pausing = np.where(steady & (modulation < PAUSE_POWER), self._pausing + 1, 0)
        self._carrier = np.where(self._pausing >= BRIEF_HOPS, brief, self._carrier)
        known = self._unmodulated & np.isfinite(self._carrier) & np.isfinite(present)
        return np.where(known, self._carrier, present)
