"""What of quadrature follows the programme, and what does not: band by band, from the spectra of a second.

In each band of 16 Hz the transfer from m to quadrature is taken as constant. The part of quadrature that it explains
is incidental phase modulation, the rest is noise. Bins of a Hann window share noise with their neighbours (correlation
2/3 and 1/6; Harris 1978), which makes the explained part of pure noise 1 + 2 (4/9 + 1/36) = 1.94 bins' worth.
"""

from dataclasses import dataclass

import numpy as np

from monitord.blocks import BIN_POWER, Precise, Second
from monitord.stage import Bank

LINE_POWER = 3.0
"""Bins of a Hann line of amplitude a: sum of squares 1.5 a^2, power a^2 / 2."""

EXPLAINED_BINS = 1 + 2 * (4 / 9 + 1 / 36)
_LOWEST_HZ = 20.0
_BAND_BINS = 16
_CLEAR = 4.0  # programme over noise in a band
_MOST_TRANSFER = (
    0.7  # rad: what stands in quadrature alone (the programme's square, another station) follows nothing
)


@dataclass(frozen=True, slots=True)
class Coherence:
    """One second, arrays (channels, bands) but for `noise`.

    power: mean square of m in the band, with its noise. transfer: from m to quadrature, complex; 0 where m does not
    stand clear. rest: mean power of a quadrature bin, less what is explained. noise: expected of it from reception
    (channels,).
    """

    power: Precise
    transfer: np.ndarray
    rest: Precise
    noise: Precise


class Bands:
    """The bands of a bank's channels."""

    def __init__(self, bank: Bank) -> None:
        bin_hz = 1 / (10 * bank.hop_s)
        first = int(np.ceil(_LOWEST_HZ / bin_hz))
        self.count = max(1, (int(bank.channels[0].bandwidth_hz / bin_hz) - first) // _BAND_BINS)
        self._bins = slice(first, first + self.count * _BAND_BINS)
        self.width_hz = self.count * _BAND_BINS * bin_hz

    def of(self, second: Second) -> Coherence:
        """What the second shows."""
        shape = (-1, self.count, _BAND_BINS)
        m = second.modulation[:, self._bins].reshape(shape)
        q = second.quadrature[:, self._bins].reshape(shape)
        noise = BIN_POWER / 2 * second.noise_density / np.square(second.amplitude) * second.bin_hz
        power = np.square(np.abs(m)).sum(axis=2, dtype=np.float64)
        whole = np.square(np.abs(q)).sum(axis=2, dtype=np.float64)
        clear = power > (1 + _CLEAR) * _BAND_BINS * noise[:, None]
        transfer = np.einsum("cbk,cbk->cb", np.conj(m), q) / np.where(clear, power, np.inf)
        transfer = np.where(np.abs(transfer) < _MOST_TRANSFER, transfer, 0)
        follows = transfer != 0
        left = np.where(follows, _BAND_BINS - EXPLAINED_BINS, _BAND_BINS)
        rest = (whole - np.square(np.abs(transfer)) * power) / left
        return Coherence(power / LINE_POWER, transfer, rest, noise)
