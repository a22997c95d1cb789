"""Sideband balance: power of the upper sideband over that of the lower, 0.3 kHz to the audio bandwidth.

With I and Q the spectra of what is in phase and in quadrature, the baseband is I + jQ above the carrier and
conj(I) + j conj(Q) below: powers |I|^2 + |Q|^2 -+ 2 Im(conj(I) Q). Reception noise is in both alike.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import BIN_POWER, Detected, Precise, Second
from monitord.quantities import Quantity
from monitord.stage import Bank

_LOWEST_HZ = 300.0
_CLEAR = (
    10.0  # times what the noise's power scatters by: the stronger side is then known within half a decibel
)


class SidebandBalanceMeter:
    """Over the interval's seconds; absent where neither sideband stands clear of the noise.

    Of a sideband that does not, no more is said than that it is below the noise: the balance is then a bound.
    """

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "sideband_balance_db",
            "dB",
            "Upper sideband over lower, from 0.3 kHz to the audio bandwidth.",
            "DESIGN 4",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._bank = bank
        bin_hz = 1 / (10 * bank.hop_s)
        top_hz = bank.channels[0].bandwidth_hz
        lowest_hz = min(_LOWEST_HZ, top_hz / 2)
        self._bins = slice(int(np.ceil(lowest_hz / bin_hz)), int(top_hz / bin_hz) + 1)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        count = len(self._bank.channels)
        self._power = np.zeros((2, count))  # above and below the carrier
        self._noise = np.zeros(count)
        self._scatter = np.zeros(count)  # its variance

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        if detected.second is not None:
            self._take(detected.second)
        return {}

    def _take(self, second: Second) -> None:
        in_phase, quadrature = second.modulation[:, self._bins], second.quadrature[:, self._bins]
        both = np.square(np.abs(in_phase)).sum(axis=1) + np.square(np.abs(quadrature)).sum(axis=1)
        skew = 2 * np.einsum("cb,cb->c", np.conj(in_phase), quadrature).imag
        bins = in_phase.shape[1]
        each = BIN_POWER * second.noise_density / np.square(second.amplitude) * second.bin_hz
        use = second.usable
        self._power += np.where(use, [both - skew, both + skew], 0)
        self._noise += np.where(use, each * bins, 0)
        # Neighbouring bins of a Hann window share noise: half as many independent ones (Harris 1978).
        self._scatter += np.where(use, 2 * bins * np.square(each), 0)

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        least = np.sqrt(self._scatter)
        sides = np.maximum(self._power - self._noise, least)
        clear = (sides.max(axis=0) > _CLEAR * least) & (self._noise > 0)
        upper, lower = np.where(clear, sides, np.nan)
        self.reset()
        return {"sideband_balance_db": 10 * np.log10(upper / lower)}
