"""Which faults stand against a hop: bits of Fault for each channel."""

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Fault, Flags
from monitord.stage import Bank

WEAK_C_N0_DBHZ = 45.0
# In +-5 kHz: 20 dB, where noise and programme peaks are of one size; a hop's own C/N0 scatters by 0.25 dB, and none of
# those at 60 dB-Hz may drop out.
_PEAKS_C_N0_DBHZ = 59.2


def peaks_mean_something(detected: Detected, bank: Bank) -> Flags:
    """C/N0 of this hop is high enough, for the bandwidth, to tell peaks from noise (channels,)."""
    least = 10 ** (_PEAKS_C_N0_DBHZ / 10) * bank.channels[0].bandwidth_hz / 5000
    return np.asarray(np.square(detected.hop_amplitude) > least * detected.noise_density)


class FaultJudge:
    """Judges the hops of one bank; keeps nothing from hop to hop."""

    def __init__(self, bank: Bank) -> None:
        self._bank = bank
        beyond = [channel.emission_bandwidth_hz > channel.bandwidth_hz for channel in bank.channels]
        self._always: NDArray[np.uint32] = np.where(beyond, np.uint32(Fault.BAND_LIMITED), np.uint32(0))

    def faults(self, detected: Detected) -> NDArray[np.uint32]:
        """Bits of Fault that stand against this hop (channels,)."""
        span = detected.span
        weak = np.square(detected.hop_amplitude) < 10 ** (WEAK_C_N0_DBHZ / 10) * detected.noise_density
        weak |= ~peaks_mean_something(detected, self._bank)
        bits = self._always.copy()
        calm = detected.settled.all() and not weak.any() and not detected.fading.any()
        if calm and not span.fresh and not span.clipped:
            return bits
        bits[detected.fading] |= np.uint32(Fault.FADING)
        bits[~detected.locked] |= np.uint32(Fault.UNLOCKED)
        bits[weak & detected.locked] |= np.uint32(Fault.WEAK_SIGNAL)
        bits[detected.locked & ~detected.settled] |= np.uint32(Fault.SETTLING)
        if span.fresh and span.index > 0:
            bits |= np.uint32(Fault.SOURCE_GAP)
        if span.clipped:
            bits |= np.uint32(Fault.CLIPPING)
        return bits
