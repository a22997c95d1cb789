"""Signal to reception noise under programme: rms of the programme over the noise that reception adds to it.

Complex noise of density N0 has N0 / 2 on each side of the carrier in phase: N0 B in an audio bandwidth of B, re the
carrier N0 B / A^2, and as much in quadrature. There it is measured while the programme plays, less what follows the
programme; the median over bands of 16 Hz is deaf to lines. Phase that goes with the programme's square stays in it.
"""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Precise, Second
from monitord.measure.coherence import LINE_POWER, Bands
from monitord.quantities import Quantity
from monitord.stage import Bank

_LEAST = 0.2  # signal power over noise power: below, the difference of two nearly equal powers is no signal
_MEDIAN = 0.957  # over mean, of a gamma variable of shape 7.7: 15 bins of which 1.94 are like one


class SignalToNoiseMeter:
    """Both powers over the interval's seconds; absent where the programme does not stand clear of the noise (-7 dB)."""

    quantities: tuple[Quantity, ...] = (
        Quantity(
            "audio_signal_to_noise_db",
            "dB",
            "Programme over reception noise in the audio bandwidth, while the programme plays.",
            "CHECKS E5",
            trusted_only=True,
        ),
    )

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._channels = len(bank.channels)
        self._noise_hz = bank.noise_hz
        self._bandwidth_hz = bank.channels[0].bandwidth_hz
        self._bands = Bands(bank)
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._signal, self._hops = np.zeros(self._channels), np.zeros(self._channels)
        self._noise, self._seconds = np.zeros(self._channels), np.zeros(self._channels)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        usable = detected.settled & ~detected.broken
        wave = detected.coherent.real
        square = np.einsum("cf,cf->c", wave, wave) / wave.shape[1] - np.square(
            wave.mean(axis=1, dtype=np.float64)
        )
        square -= detected.noise_density * self._noise_hz / np.square(detected.amplitude)
        self._signal += np.where(usable, square, 0)
        self._hops += usable
        if detected.second is not None:
            self._take(detected.second)
        return {}

    def _take(self, second: Second) -> None:
        each = np.median(self._bands.of(second).rest, axis=1) / _MEDIAN
        noise = each * (self._bandwidth_hz / second.bin_hz) / LINE_POWER
        self._noise += np.where(second.usable, noise, 0)
        self._seconds += second.usable

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        noise = self._noise / np.maximum(self._seconds, 1)
        signal = self._signal / np.maximum(self._hops, 1)
        ratio = signal / np.where(noise > 0, noise, np.nan)
        self.reset()
        return {"audio_signal_to_noise_db": 10 * np.log10(np.where(ratio > _LEAST, ratio, np.nan))}
