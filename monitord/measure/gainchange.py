"""A step of the receiver's gain: carrier and noise floor go up or down together. Fading moves the carrier alone."""

from collections.abc import Mapping

import numpy as np

from monitord.blocks import Detected, Fault, Precise
from monitord.quantities import Quantity
from monitord.stage import Bank

_SIDE_HOPS = 5  # on each side of the step; by their median
_STEP_DB = 1.5  # the noise of five hops scatters by 0.2 dB
_ALIKE_DB = 1.0
_MOST_C_N0_DB = 130.0  # above, what looks like noise is that of the arithmetic, and moves with the carrier
_MOST_ASIDE = 2.0  # of the noise's power in quadrature: with more there, it is not the noise that is measured
_STANDS_HOPS = 10  # for as long as levels and means straddle the step


class GainChangeMeter:
    """Raises the fault for a second after a step of 1.5 dB or more."""

    quantities: tuple[Quantity, ...] = ()

    def prepare(self, bank: Bank) -> None:
        """See stage.Meter."""
        self._channels = len(bank.channels)
        self._noise_hz = bank.noise_hz
        self.reset()

    def reset(self) -> None:
        """See stage.Meter."""
        self._power_db = np.full(
            (2, 2 * _SIDE_HOPS, self._channels), np.nan
        )  # carrier and noise, the newest last
        self._stands = np.zeros(self._channels, np.int64)

    def process(self, detected: Detected) -> Mapping[str, Precise]:
        """See stage.Meter."""
        carrier, noise = np.square(detected.hop_amplitude), detected.noise_density
        wave = detected.quadrature
        aside = np.einsum("cf,cf->c", wave, wave) / wave.shape[1] * np.square(detected.amplitude)
        known = detected.settled & ~detected.broken & (aside < _MOST_ASIDE * noise * self._noise_hz)
        known &= carrier < 10 ** (_MOST_C_N0_DB / 10) * noise
        pair = 10 * np.log10(np.where(known, [carrier, noise], 1))
        self._power_db[:, :-1] = self._power_db[:, 1:]
        self._power_db[:, -1] = np.where(known, pair, np.nan)
        before, after = (
            self._power_db[:, :_SIDE_HOPS].mean(axis=1),
            self._power_db[:, _SIDE_HOPS:].mean(axis=1),
        )
        carrier_db, noise_db = after - before
        step = (np.abs(carrier_db) > _STEP_DB) & (np.abs(carrier_db - noise_db) < _ALIKE_DB)
        self._stands = np.where(step, _STANDS_HOPS, np.maximum(self._stands - 1, 0))
        return {"faults": np.where(self._stands > 0, int(Fault.GAIN_CHANGED), 0)}

    def reading(self) -> Mapping[str, Precise]:
        """See stage.Meter."""
        return {}
