"""Which faults stand against a hop: bits of Fault for each channel."""

import numpy as np
from numpy.typing import NDArray

from monitord.blocks import Detected, Fault, Flags
from monitord.stage import Bank

WEAK_C_N0_DBHZ = 45.0
_PEAKS_C_N0_DBHZ = 60.0  # in +-5 kHz: 20 dB, where noise and programme peaks are of one size


def peaks_mean_something(detected: Detected, bank: Bank) -> Flags:
    """C/N0 of this hop is high enough, for the bandwidth, to tell peaks from noise (channels,)."""
    least_db = _PEAKS_C_N0_DBHZ + 10 * np.log10(bank.channels[0].bandwidth_hz / 5000)
    return np.asarray(np.square(detected.hop_amplitude) > 10 ** (least_db / 10) * detected.noise_density)


def faults_of(detected: Detected, bank: Bank) -> NDArray[np.uint32]:
    """Bits of Fault that stand against this hop (channels,)."""
    weak = np.square(detected.hop_amplitude) < 10 ** (WEAK_C_N0_DBHZ / 10) * detected.noise_density
    weak |= ~peaks_mean_something(detected, bank)
    band_limited = [channel.emission_bandwidth_hz > channel.bandwidth_hz for channel in bank.channels]
    bits = np.zeros(len(weak), np.uint32)
    for fault, there in (
        (Fault.UNLOCKED, ~detected.locked),
        (Fault.WEAK_SIGNAL, weak & detected.locked),
        (Fault.SETTLING, detected.locked & ~detected.settled),
        (Fault.SOURCE_GAP, np.full(len(bits), detected.span.fresh and detected.span.index > 0)),
        (Fault.CLIPPING, np.full(len(bits), detected.span.clipped > 0)),
        (Fault.BAND_LIMITED, np.array(band_limited)),
    ):
        bits |= np.where(there, np.uint32(fault), np.uint32(0))
    return bits
